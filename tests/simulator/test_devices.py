"""The twins as a link sees them: limits, watchdogs, the hardwired chain, and every kind of fault."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from controller.cli.job import load_job
from controller.cli.plant import build_world
from simulator.faults import KINDS, schedule
from simulator.spec import ScheduledFault
from simulator.world import World

SEQUENCE = Path(__file__).parents[2] / "configs" / "strontium" / "sequence.toml"


class Bench:
    """A world with hands of its own on the clock."""

    def __init__(self) -> None:
        self.now = 0.0
        self.world: World = build_world(load_job(str(SEQUENCE), simulated=True), seed=1, now=lambda: self.now)

    def ask(self, role: str, verb: str, *values: float) -> tuple[float, ...] | None:
        answer = self.world.twins[role].command(verb, *values)
        return answer if answer is None else tuple(answer)

    def report(self, role: str):
        return self.world.twins[role].report()

    def live(self) -> None:
        for role, verb, *values in (
            ("permit", "enable"), ("accelerating", "enable"), ("accelerating", "set", 8000.0),
            ("esa", "enable"), ("esa", "set", 960.0), ("detector", "enable"), ("detector", "set", 2200.0),
            ("source", "enable"), ("magnet", "enable"), ("magnet", "set", 4.0),
        ):  # fmt: skip
            assert self.ask(role, verb, *values) == (0,)
        self.now += 5.0
        for role in self.world.twins:
            self.report(role)


@pytest.fixture
def bench() -> Bench:
    return Bench()


def test_limits_are_held_in_the_device(bench: Bench) -> None:
    assert bench.ask("accelerating", "set", 9000.0) == (2,)
    assert bench.ask("accelerating", "set", -1.0) == (2,)
    assert bench.ask("accelerating", "set_limits", 5000.0, 1000.0, 0.0) == (0,)
    assert bench.ask("accelerating", "limits") == (0, 5000.0, 1000.0, 0.0)
    assert bench.ask("accelerating", "set", 5001.0) == (2,)
    assert bench.ask("accelerating", "set_limits", 9999.0, 1000.0, 0.0) == (2,)
    assert bench.ask("accelerating", "fly") == (1,)


def test_a_gate_is_read_when_it_has_ended_and_not_before(bench: Bench) -> None:
    assert bench.ask("counter", "gate_read") == (5,)
    assert bench.ask("counter", "gate", 0.5) == (0,)
    bench.now = 0.4
    assert bench.ask("counter", "gate_read") == (5,)
    bench.now = 0.5
    answer = bench.ask("counter", "gate_read")
    assert answer is not None
    assert answer[:4] == (0, 0.0, 0.5, 0.5)


def test_a_watchdog_switches_off_what_nobody_speaks_to(bench: Bench) -> None:
    bench.live()
    bench.ask("accelerating", "set_limits", 8200.0, 1e4, 2.0)
    for _ in range(10):  # heard each second: stays on
        bench.now += 1.0
        bench.report("accelerating")
    assert bench.world.plant.supplies["accelerating"].enabled
    bench.now += 2.5
    bench.report("esa")  # anybody's look at the plant lets time pass
    assert not bench.world.plant.supplies["accelerating"].enabled
    assert any(event.what == "accelerating watchdog" for event in bench.world.truth.events)


def test_the_permit_line_carries_the_high_voltage_and_never_the_magnet(bench: Bench) -> None:
    assert bench.ask("accelerating", "enable") == (5,)  # the line is open
    bench.live()
    plant = bench.world.plant
    bench.ask("permit", "disable")
    assert not any(supply.enabled for supply in plant.supplies.values())
    assert not plant.source_open
    assert plant.magnet.enabled
    assert plant.magnet.amps(bench.now + 5) == pytest.approx(4.0)


def test_an_opened_cover_cuts_by_the_hardwired_chain_after_its_contactor(bench: Bench) -> None:
    bench.live()
    schedule(bench.world.plant, bench.world.twins, ScheduledFault("cover open", at=bench.now + 1.0))
    start = bench.now
    bench.now = start + 1.04
    bench.report("interlocks")
    assert bench.world.plant.supplies["accelerating"].enabled
    bench.now = start + 1.06
    bench.report("interlocks")
    assert not bench.world.plant.supplies["accelerating"].enabled


def observe(bench: Bench, kind: str, role: str | None) -> object:
    """What a link would notice of a fault of this kind."""
    plant = bench.world.plant
    match kind:
        case "cover open":
            return bench.report("interlocks")[2][:2] == (0.0, 0.0)
        case "emergency stop":
            return bench.report("interlocks")[2][2] == 0.0
        case "water lost":
            return bench.report("water")[2][0] < 5e-5
        case "source vacuum lost":
            return bench.report("source_gauge")[2][0] > 1e-2
        case "analyser vacuum lost":
            return bench.report("analyser_gauge")[2][0] > 1e-3
        case "arc":
            return bool(bench.report("accelerating")[1] & 4)
        case "output deviates":
            return abs(bench.report("accelerating")[2][0] / 8000.0 - 1) > 0.04
        case "output stuck":
            bench.ask("accelerating", "set", 7000.0)
            before = plant.supplies["accelerating"].nominal(bench.now)
            bench.now += 1.0
            stuck = plant.supplies["accelerating"].nominal(bench.now) == before
            bench.ask("accelerating", "set", 8000.0)
            bench.now += 1.0
            return stuck
        case "reading frozen":
            return bench.report("probe")[0] == bench.report("probe")[0]
        case "reading garbled":
            report = bench.report("probe")
            return not (
                isinstance(report, tuple)
                and len(report) == 3
                and len(report[2]) == 1
                and math.isfinite(report[2][0])
                and report[2][0] < 1e3
            )
        case "no reply":
            return bench.report("probe") is None
    raise AssertionError(kind)


ROLES = {"arc": "accelerating", "output deviates": "accelerating", "output stuck": "accelerating"}
ROLES |= {"reading frozen": "probe", "reading garbled": "probe", "no reply": "probe"}


@pytest.mark.parametrize("kind", list(KINDS))
def test_every_fault_begins_when_it_should_and_ends_when_it_should(bench: Bench, kind: str) -> None:
    bench.live()
    role = ROLES.get(kind)
    assert not observe(bench, kind, role)
    begins = bench.now + 1.0
    fault = ScheduledFault(kind, at=begins, role=role, lasts=20.0, size=0.05)
    schedule(bench.world.plant, bench.world.twins, fault)
    bench.now = begins + 10.0
    for other in bench.world.twins:
        bench.report(other)
    assert observe(bench, kind, role), kind
    assert any(kind in event.what and "begins" in event.what for event in bench.world.truth.events)
    bench.now = begins + 120.0
    for other in bench.world.twins:
        bench.report(other)
    if kind == "arc":  # a supply's own trip stays until it is reset
        assert observe(bench, kind, role)
        bench.ask("accelerating", "reset")
    assert not observe(bench, kind, role), kind
    assert any(kind in event.what and "ends" in event.what for event in bench.world.truth.events)


@pytest.mark.parametrize(
    ("fault", "says"),
    [
        (ScheduledFault("sabotage", at=1.0), "no fault is called"),
        (ScheduledFault("output stuck", at=1.0), "needs a role"),
        (ScheduledFault("output stuck", at=1.0, role="probe"), "not an output"),
        (ScheduledFault("no reply", at=1.0, role="nobody"), "no device has the role"),
    ],
)
def test_an_impossible_fault_is_refused(bench: Bench, fault: ScheduledFault, says: str) -> None:
    with pytest.raises(ValueError, match=says):
        schedule(bench.world.plant, bench.world.twins, fault)


def test_another_seed_is_another_instrument_and_the_same_seed_the_same() -> None:
    job = load_job(str(SEQUENCE), simulated=True)
    hidden = [build_world(job, seed=seed, now=lambda: 0.0).hidden for seed in (5, 5, 6)]
    assert hidden[0] == hidden[1]
    assert all(hidden[0][name] != hidden[2][name] for name in hidden[0])
