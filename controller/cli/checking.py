"""``check`` and ``forecast``: what can be said of a job without energising anything."""

from __future__ import annotations

import asyncio
from collections.abc import Mapping, Sequence

from controller.cli.job import Job
from controller.cli.plant import build_world
from controller.cli.screen import Screen, columns, counted, duration
from controller.cli.session import open_all
from controller.errors import ExitCode
from controller.route.forecast import Forecast, describe, forecast
from controller.safety.assembly import assemble
from controller.safety.proving import Finding
from drivers.clock import Clock, VirtualLoop
from drivers.contract import Opened

BANNERS = {
    "simulated": "SIMULATION: no hardware is connected to this run.",
    "hardware": "HARDWARE: high voltage, stored energy, strong field. This program is not a safety system.",
}


def banner(job: Job, screen: Screen) -> None:
    """Says in words what is at the other end."""
    screen.say(BANNERS[job.instrument.settings.kind])


def check_job(job: Job, screen: Screen) -> int:
    """Proves what can be proved without touching an output."""
    banner(job, screen)
    virtual = job.instrument.settings.kind == "simulated"
    with asyncio.Runner(loop_factory=VirtualLoop if virtual else None) as runner:
        findings = runner.run(_findings(job, virtual=virtual))
    rows = [(f.verdict.upper(), f.role, f.what, f.text) for f in findings]
    screen.say(columns([("", "device", "looked at", "found"), *rows]))
    failed = [finding for finding in findings if finding.verdict == "fail"]
    screen.say()
    show_forecast(job, forecast_of(job), screen)
    screen.say()
    if failed:
        screen.say(f"NOT READY: {failed[0].role}: {failed[0].text}. Next: {failed[0].next}")
    else:
        screen.say("READY: nothing was energised. Next: rehearse it, then run it.")
    screen.result(
        {
            "ready": not failed,
            "findings": [finding._asdict() for finding in findings],
            "forecast": forecast_data(job, forecast_of(job)),
        }
    )
    if not failed:
        return ExitCode.DONE
    return ExitCode.DEVICE_UNREACHABLE if failed[0].unreachable else ExitCode.NOT_PERMITTED


class _NoJournal:
    """A check leaves no record: what it finds is printed."""

    fault: str | None = None

    def telemetry(self, tick: int, at_ns: int, values: Sequence[float | None], notes: str | None) -> None:
        """Not kept."""

    def request(self, *row: object) -> None:
        """Not kept."""

    def state(self, at_ns: int, source: str, event: str, target: str) -> None:
        """Not kept."""

    def event(
        self,
        at_ns: int,
        severity: str,
        kind: str,
        source: str,
        text: str,
        data: Mapping[str, object] | None = None,
    ) -> None:
        """Not kept."""

    def reading(self, row: object) -> None:
        """Not kept."""

    async def durable(self) -> None:
        """Nothing to wait for."""


async def _findings(job: Job, *, virtual: bool) -> list[Finding]:
    clock = Clock(virtual=virtual)
    world = build_world(job, seed=1, now=clock.seconds) if job.sample is not None else None
    opened: Mapping[str, Opened] = open_all(job.instrument.settings, world, clock.mono_ns)
    supervisor, _ = assemble(job.instrument.settings, opened, clock, _NoJournal())
    ticking = asyncio.create_task(supervisor.run(), name="supervisor")
    try:
        # on hardware a check does not sit out the hold times: it says what is still maturing
        return await supervisor.prove(wait=virtual)
    finally:
        supervisor.close()
        await ticking
        for device in opened.values():
            device.monitor.close()


def forecast_of(job: Job) -> Forecast:
    return forecast(job.route, job.sequence.settings, job.instrument.settings)


def forecast_job(job: Job, screen: Screen) -> int:
    banner(job, screen)
    expected = forecast_of(job)
    screen.say(columns(describe(job.route)))
    screen.say()
    show_forecast(job, expected, screen)
    screen.result(forecast_data(job, expected))
    return ExitCode.DONE


def show_forecast(job: Job, expected: Forecast, screen: Screen) -> None:
    run = job.sequence.settings.run
    stations, stops = len(job.route.stations), len(job.route.stops)
    screen.say(
        f"{job.sequence.settings.title}: {counted(stations, 'station')}, {counted(stops, 'stop')}, "
        f"{counted(run.blocks, 'block')} of {counted(run.cycles_per_block, 'cycle')}"
    )
    screen.say(
        f"a cycle counts for {expected.dwell_seconds:.1f} s and is dead for {expected.dead_seconds:.1f} s "
        f"(duty {100 * expected.duty:.0f} %); the whole takes about {duration(expected.total_seconds)}"
    )
    for ratio in expected.ratios:
        pairs = zip(ratio.labels, ratio.best_seconds, strict=True)
        screen.say(
            f"  {ratio.name}: {1e6 * ratio.u_relative:.0f} ppm from counting alone; "
            f"{1e6 * ratio.best_u_relative:.0f} ppm with the dwells "
            + ", ".join(f"{label} {seconds:.2f} s" for label, seconds in pairs)
        )


def forecast_data(job: Job, expected: Forecast) -> dict[str, object]:
    """The forecast as plain data."""
    return {
        "stations": [
            {
                "name": station.name,
                "field_tesla": station.field_tesla,
                "stops": [
                    {
                        "label": stop.label,
                        "kind": stop.kind,
                        "mass_to_charge_u": stop.mass_to_charge,
                        "accel_volts": stop.accel_volts,
                        "esa_volts": stop.esa_volts,
                        "dwell_seconds": stop.dwell_seconds,
                    }
                    for stop in station.stops
                ],
            }
            for station in job.route.stations
        ],
        "dwell_seconds_per_cycle": expected.dwell_seconds,
        "dead_seconds_per_cycle": expected.dead_seconds,
        "total_seconds": expected.total_seconds,
        "expected_counts": expected.expected_counts,
        "ratios": [
            {"name": r.name, "u_relative": r.u_relative, "best_u_relative": r.best_u_relative}
            for r in expected.ratios
        ],
    }
