"""Every kind of fault on a small plant: what it does, when it begins, when it ends, what the log says."""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest
from plants import OUTPUTS, ROLES, Bench

from simulator.faults import KINDS
from simulator.spec import ScheduledFault

BEGINS, LASTS = 20.0, 30.0
Holds = Callable[[Bench], bool]


def stuck(role: str) -> Holds:
    def holds(bench: Bench) -> bool:
        """Two set-points, acknowledged; does the output follow?"""
        goals = (1.0, 2.0) if role == "magnet" else (500.0, 600.0)
        ways = []
        for goal in goals:
            assert bench.ask(role, "set", goal) == (0,)
            bench.at(bench.clock[0] + 3.0)
            ways.append(bench.values(role)[0] * (2 if role == "esa" else 1))
        return not all(math.isclose(way, goal, rel_tol=1e-3) for way, goal in zip(ways, goals, strict=True))

    return holds


def deviates(role: str, size: float) -> Holds:
    nominal = {"magnet": 4.0, "accelerating": 8000.0, "esa": 480.0, "detector": 2200.0}[role]
    return lambda bench: math.isclose(bench.values(role)[0] / nominal - 1, size, abs_tol=1e-3)


def garbled(bench: Bench) -> bool:
    """None of ten reports makes sense for a gauge."""

    def sane(report: object) -> bool:
        match report:
            case (int(), int(), (float(p),)) if 0 < p < 1e6:
                return True
        return False

    return not any(sane(bench.report("analyser_gauge")) for _ in range(10))


def frozen(bench: Bench) -> bool:
    first = bench.report("analyser_gauge")
    bench.at(bench.clock[0] + 1.0)
    return bool(bench.report("analyser_gauge") == first)


CASES: list[tuple[str, str | None, float | None, Holds]] = [
    ("cover open", None, None, lambda b: b.values("interlocks") == (0.0, 0.0, 1.0, 1.0, 1.0)),
    ("emergency stop", None, None, lambda b: b.values("interlocks") == (1.0, 1.0, 0.0, 1.0, 1.0)),
    ("water lost", None, None, lambda b: b.values("water")[0] < 1e-5 and b.values("water")[1] == 0.0),
    ("source vacuum lost", None, None, lambda b: b.values("source_gauge")[0] > 1e3),
    ("analyser vacuum lost", None, None, lambda b: b.values("analyser_gauge")[0] > 1e3),
    ("arc", "esa", None, lambda b: bool(b.report("esa")[1] & 4)),
    ("arc", None, None, lambda b: bool(b.report("accelerating")[1] & 4)),
    *(("output deviates", role, -0.1, deviates(role, -0.1)) for role in OUTPUTS),
    ("output deviates", "accelerating", None, deviates("accelerating", 0.05)),
    *(("output stuck", role, None, stuck(role)) for role in OUTPUTS),
    ("reading frozen", "analyser_gauge", None, frozen),
    ("reading garbled", "analyser_gauge", None, garbled),
    ("no reply", "analyser_gauge", None, lambda b: b.report("analyser_gauge") is None),
]


def test_every_kind_has_a_case() -> None:
    assert {kind for kind, *_ in CASES} == set(KINDS)


@pytest.mark.parametrize(("kind", "role", "size", "holds"), CASES, ids=lambda value: str(value)[:24])
def test_a_fault_does_what_it_says_for_as_long_as_it_says(
    kind: str, role: str | None, size: float | None, holds: Holds
) -> None:
    bench = Bench(faults=[ScheduledFault(kind, at=BEGINS, role=role, lasts=LASTS, size=size)])
    bench.live()
    bench.at(BEGINS - 8.0)
    if kind != "output stuck":
        assert not holds(bench)
    bench.at(BEGINS + 10.0)
    assert holds(bench)
    words = f"fault {kind} {role} " if role else f"fault {kind} "
    assert bench.happened(words + "begins") == [BEGINS]
    assert bench.happened(words + "ends") == []
    # a vacuum comes back with ten seconds' time constant, from twenty-four powers of e
    bench.at(BEGINS + LASTS + 150.0)
    assert bench.happened(words + "ends") == [BEGINS + LASTS]
    if kind == "arc":  # a trip stays until somebody clears it
        assert holds(bench)
        assert bench.ask(role or "accelerating", "reset") == (0,)
    assert not holds(bench)


def test_a_fault_without_a_duration_stays() -> None:
    bench = Bench(faults=[ScheduledFault("water lost", at=1.0)])
    bench.at(3600.0)
    assert bench.values("water")[0] < 1e-6
    assert bench.happened("fault water lost ends") == []


def test_what_is_lost_twice_is_still_lost() -> None:
    """A level that is sent to where it already is stays there."""
    faults = [ScheduledFault("water lost", at=1.0), ScheduledFault("water lost", at=200.0)]
    faults += [
        ScheduledFault("analyser vacuum lost", at=1.0),
        ScheduledFault("analyser vacuum lost", at=200.0),
    ]
    bench = Bench(faults=faults)
    bench.at(100.0)
    bench.at(300.0)
    assert bench.values("water") == (0.0, 0.0)
    assert bench.values("analyser_gauge")[0] == pytest.approx(1e5, rel=0.05)


def test_pressure_rises_exponentially_in_its_logarithm() -> None:
    """ln p goes to ln(1e5 Pa) with half a second: closed form; the reading has 1 % of noise."""
    bench = Bench(faults=[ScheduledFault("analyser vacuum lost", at=5.0)])
    for after in (0.0, 0.1, 0.5, 1.0, 3.0):
        bench.at(5.0 + after)
        share = math.exp(-after / 0.5)
        expected = math.exp(share * math.log(4e-6) + (1 - share) * math.log(1e5))
        assert bench.values("analyser_gauge")[0] == pytest.approx(expected, rel=0.04), after


def test_a_cover_cuts_the_high_voltage_by_the_chain_alone() -> None:
    bench = Bench(faults=[ScheduledFault("cover open", at=20.0, lasts=5.0)])
    bench.live()
    bench.at(20.04)
    assert bench.report("accelerating")[1] & 1
    bench.at(20.06)
    assert not bench.report("accelerating")[1] & 1
    bench.at(30.0)
    assert not bench.report("accelerating")[1] & 1  # the cover is shut, and nobody has switched on
    assert bench.report("magnet")[1] & 1


@pytest.mark.parametrize("role", ["accelerating", "esa", "detector"])
def test_an_output_that_is_stuck_is_still_cut_by_the_chain(role: str) -> None:
    """The contactor is behind the supply's electronics: what these do does not matter to it."""
    bench = Bench(faults=[ScheduledFault("output stuck", at=11.0, role=role)])
    bench.live()
    bench.at(12.0)
    bench.ask(role, "disable")
    bench.at(15.0)
    volts = bench.plant.supplies[role].nominal(15.0)
    assert volts > 900.0  # it says yes and does nothing
    bench.ask("permit", "disable")
    bench.at(16.0)
    assert bench.plant.supplies[role].nominal(16.0) == pytest.approx(volts * math.exp(-2.0), rel=1e-3)


def test_a_frozen_reading_says_the_same_while_the_plant_goes_on() -> None:
    bench = Bench(faults=[ScheduledFault("reading frozen", at=11.0, role="accelerating", lasts=4.0)])
    bench.live()
    bench.at(11.0)
    kept = bench.report("accelerating")
    bench.ask("accelerating", "set", 4000.0)
    bench.at(14.0)
    assert bench.report("accelerating") == kept
    assert bench.plant.supplies["accelerating"].nominal(14.0) == pytest.approx(4000.0, rel=1e-9)
    bench.at(15.5)
    assert bench.values("accelerating")[0] == pytest.approx(4000.0, abs=1.0)


def test_a_silent_device_answers_no_command_and_no_question() -> None:
    bench = Bench(faults=[ScheduledFault("no reply", at=11.0, role="esa", lasts=4.0)])
    bench.live()
    bench.at(12.0)
    assert bench.ask("esa", "set", 100.0) is None
    assert bench.world.twins["esa"].identity() is None
    bench.at(16.0)
    assert bench.plant.supplies["esa"].set_point == 960.0
    assert bench.ask("esa", "set", 100.0) == (0,)


def test_faults_are_written_into_the_truth_log_in_the_order_of_their_times() -> None:
    bench = Bench(
        faults=[
            ScheduledFault("emergency stop", at=9.0, lasts=1.0),
            ScheduledFault("no reply", at=3.0, role="water", lasts=20.0),
            ScheduledFault("arc", at=5.0, role="detector"),
        ]
    )
    bench.clock[0] = 100.0
    bench.report("interlocks")  # one look, much later: each happened at its own time
    told = [(e.at, e.what) for e in bench.world.truth.events if e.what.startswith("fault")]
    assert told == [
        (3.0, "fault no reply water begins"),
        (5.0, "fault arc detector begins"),
        (9.0, "fault emergency stop begins"),
        (10.0, "fault emergency stop ends"),
        (23.0, "fault no reply water ends"),
    ]
    assert [e.at for e in bench.world.truth.events] == sorted(e.at for e in bench.world.truth.events)


@pytest.mark.parametrize("kind", list(KINDS))
def test_a_role_that_no_device_has_is_refused(kind: str) -> None:
    with pytest.raises(ValueError, match="nobody"):
        Bench(faults=[ScheduledFault(kind, at=1.0, role="nobody")])


@pytest.mark.parametrize("kind", ["arc", "output stuck", "output deviates"])
@pytest.mark.parametrize("role", [role for role in ROLES if role not in OUTPUTS])
def test_a_fault_of_an_output_needs_an_output(kind: str, role: str) -> None:
    with pytest.raises(ValueError, match=role):
        Bench(faults=[ScheduledFault(kind, at=1.0, role=role)])


@pytest.mark.parametrize("kind", ["sabotage", "", "Arc", "cover  open"])
def test_a_kind_that_is_not_known_is_refused(kind: str) -> None:
    with pytest.raises(ValueError, match="known: cover open"):
        Bench(faults=[ScheduledFault(kind, at=1.0, role="esa")])


def test_the_magnet_has_no_arc() -> None:
    with pytest.raises(ValueError, match="magnet"):
        Bench(faults=[ScheduledFault("arc", at=1.0, role="magnet")])
