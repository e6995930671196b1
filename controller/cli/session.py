"""One run from opened devices to a closed record: the wiring that rehearsals and runs share."""

from __future__ import annotations

import asyncio
import contextlib
import gc
import signal
from collections import deque
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import FrameType

from controller.cli.job import Job
from controller.cli.plant import build_world
from controller.cli.screen import Progress, Screen
from controller.config.instrument import Instrument
from controller.errors import DeviceUnreachable, ExitCode
from controller.record.store import RecordHeader, RunRecord
from controller.reduce.from_record import reduce_record
from controller.reduce.result import Reduction
from controller.route.forecast import forecast
from controller.run.actions import Actions
from controller.run.conductor import Conductor, Outcome
from controller.run.itinerary import Itinerary
from controller.run.rig import Rig
from controller.safety.assembly import ROLES, assemble, channels_of
from drivers.clock import NS, Clock, VirtualLoop, real_seconds
from drivers.contract import DeviceAbsent, Link, Opened
from drivers.inprocess import InProcessLink
from drivers.registry import open_device
from simulator.world import World

VIRTUAL_START = "2000-01-01T00:00:00+00:00"  # wall time of every rehearsal, so that equal ones are equal
REDUCED = (ExitCode.DONE, ExitCode.STOPPED, ExitCode.TRIPPED)
SIGNALS = {signal.SIGINT: "stop", signal.SIGTERM: "stop", signal.SIGUSR1: "hold", signal.SIGUSR2: "resume"}


@dataclass(slots=True)
class Ended:
    """How a session ended, with its figures."""

    outcome: Outcome
    record: Path
    simulated_seconds: float
    real_seconds: float
    ticks: int
    world: World | None = None
    reduction: Reduction | None = None
    parking: str = ""


def open_all(instrument: Instrument, world: World | None, now_ns: Callable[[], int]) -> dict[str, Opened]:
    """Every device of the instrument file. Raises DeviceUnreachable."""
    opened = {}
    for role in ROLES:
        device = getattr(instrument.devices, role)
        try:
            opened[role] = open_device(role, device.driver, _link(role, device.address, world), now_ns)
        except DeviceAbsent as error:
            raise DeviceUnreachable(f"{error}. Next: correct devices.{role} in the instrument file") from None
    return opened


def _link(role: str, address: str, world: World | None) -> Link:
    kind, _, place = address.partition(":")
    if kind == "sim" and world is not None:
        if place not in world.twins:
            raise DeviceAbsent(role, f"the simulator has no device {place!r}")
        return InProcessLink(role, world.twins[place])
    raise DeviceAbsent(role, f"no link for the address {address!r}; this version knows sim:<role>")


def conduct(job: Job, *, record: Path, seed: int, virtual: bool, screen: Screen) -> Ended:
    """Run a job to its end, parked, with its record closed and reduced. Raises TrackfieldError."""
    with asyncio.Runner(loop_factory=VirtualLoop if virtual else None) as runner:
        return runner.run(_conduct(job, record=record, seed=seed, virtual=virtual, screen=screen))


async def _conduct(job: Job, *, record: Path, seed: int, virtual: bool, screen: Screen) -> Ended:
    from datetime import datetime  # noqa: PLC0415

    started = real_seconds()
    clock = Clock(virtual=virtual, wall_start=datetime.fromisoformat(VIRTUAL_START) if virtual else None)
    instrument, sequence = job.instrument.settings, job.sequence.settings
    world = build_world(job, seed=seed, now=clock.seconds) if job.sample is not None else None
    opened = open_all(instrument, world, clock.mono_ns)
    journal = RunRecord.create(
        record,
        header=RecordHeader(
            title=sequence.title,
            instrument=instrument.name,
            mode="SIMULATION" if instrument.kind == "simulated" else "HARDWARE",
            virtual=virtual,
            seed=seed if world is not None else None,
        ),
        channels=channels_of(opened),
        durability="process" if virtual else "full",
    )
    try:
        return await _run(job, clock, world, opened, journal, screen, started)
    finally:
        for device in opened.values():
            device.monitor.close()
        journal.close()


async def _run(
    job: Job,
    clock: Clock,
    world: World | None,
    opened: Mapping[str, Opened],
    journal: RunRecord,
    screen: Screen,
    started: float,
) -> Ended:
    instrument, sequence = job.instrument.settings, job.sequence.settings
    for role, path, text in job.files():
        journal.file(role, path, text)
    if world is not None:
        _write_truth(journal, job, world)
    supervisor, gateway = assemble(instrument, opened, clock, journal)
    rig = Rig(
        clock=clock,
        supervisor=supervisor,
        gateway=gateway,
        record=journal,
        instrument=instrument,
        sequence=sequence,
        route=job.route,
        detectors={name: opened[name].detector for name in ("counter", "electrometer")},  # type: ignore[misc]
    )
    run = sequence.run
    itinerary = Itinerary(
        job.route, blocks=run.blocks, cycles_per_block=run.cycles_per_block, centre_every=run.centre_every
    )
    expected = forecast(job.route, sequence, instrument)
    progress = Progress(screen, clock, itinerary, expected.total_seconds)
    actions = Actions(rig, itinerary, on_read=progress.read)
    conductor = Conductor(rig, actions)
    supervisor.listener = conductor.told
    with _calm_collector(), _signals(conductor, screen, clock):
        ticking = asyncio.create_task(supervisor.run(), name="supervisor")
        try:
            outcome = await conductor.run()
        finally:
            supervisor.close()
            await ticking
    reduction = None
    if outcome.exit_code in REDUCED and actions.number:
        # from the file, as anybody will reduce it later; its results then join it
        await journal.durable()
        reduction = reduce_record(journal.path)
        for row in reduction.rows():
            journal.result(row)
    return Ended(
        outcome=outcome,
        record=journal.path,
        simulated_seconds=clock.mono_ns() / NS,
        real_seconds=real_seconds() - started,
        ticks=supervisor.ticks,
        world=world,
        reduction=reduction,
        parking=conductor.parking.text() if conductor.parking is not None else "",
    )


@contextlib.contextmanager
def _calm_collector() -> Iterator[None]:
    """What was made for the set-up lives as long as the run: keep the collector from walking it again.

    A tick makes some hundred tuples and no cycles, so that looking for cycles often finds nothing.
    """
    before = gc.get_threshold()
    gc.collect()
    gc.freeze()
    gc.set_threshold(20_000, 20, 20)
    try:
        yield
    finally:
        gc.unfreeze()
        gc.set_threshold(*before)


def _write_truth(journal: RunRecord, job: Job, world: World) -> None:
    for item in job.sequence.settings.ratios:
        with contextlib.suppress(KeyError):  # an ion that the sample does not hold has no true ratio
            journal.truth(
                f"{item.numerator}/{item.denominator}", world.true_ratio(item.numerator, item.denominator)
            )
    for name, value in world.hidden.items():
        journal.truth(f"hidden.{name}", value)


@contextlib.contextmanager
def _signals(conductor: Conductor, screen: Screen, clock: Clock) -> Iterator[None]:
    """A signal only sets an input; the conductor takes it at its next turn. Restored afterwards.

    Plain handlers work in virtual time too, where the loop never sleeps in the system.
    """
    pending: deque[int] = deque()
    loop = asyncio.get_running_loop()

    def take() -> None:
        while pending:
            verb = SIGNALS[signal.Signals(pending.popleft())]
            getattr(conductor, verb)(f"{verb} by signal")

    def handler(number: int, frame: FrameType | None) -> None:
        pending.append(number)
        if SIGNALS[signal.Signals(number)] == "stop":
            screen.complain(
                "Parking: voltages to zero and confirmed, magnet ramped down. "
                f"This takes some seconds of instrument time (state {conductor.state.value})."
            )
        loop.call_soon_threadsafe(take)

    try:
        before = {number: signal.signal(number, handler) for number in SIGNALS}
    except ValueError:  # not the main thread: a program that embeds this one keeps its own handlers
        yield
        return
    try:
        yield
    finally:
        for number, old in before.items():
            signal.signal(number, old)
