"""The devices' own manners on a small plant: codes, limits, watchdogs, the chain, an unreliable link."""

from __future__ import annotations

import math

import pytest
from plants import DETECTORS, OUTPUTS, ROLES, Bench

from simulator.spec import ServicesSpec

MAXIMA = {"magnet": 10.0, "accelerating": 8500.0, "esa": 1100.0, "detector": 2500.0}
GATES = ("counter", "electrometer")


@pytest.mark.parametrize("role", ROLES)
def test_a_verb_that_a_device_does_not_know_is_code_1(role: str) -> None:
    bench = Bench()
    assert set(bench.world.twins) == set(ROLES)
    assert bench.ask(role, "fly", 1.0) == (1,)
    if role not in OUTPUTS:
        assert bench.ask(role, "set", 1.0) == (1,)
    if role not in GATES:
        assert bench.ask(role, "gate", 1.0) == (1,)


@pytest.mark.parametrize("role", OUTPUTS)
def test_a_set_point_outside_the_device_s_limits_is_code_2_and_changes_nothing(role: str) -> None:
    bench = Bench()
    bench.live()
    before, top = bench.values(role), MAXIMA[role]
    for value in (-1e-9, top * (1 + 1e-9), math.inf, math.nan):
        assert bench.ask(role, "set", value) == (2,), value
    assert bench.ask(role, "set") == (2,)
    assert bench.ask(role, "set", 1.0, 2.0) == (2,)
    bench.at(12.0)
    assert bench.values(role)[2] == before[2]  # its set-point
    assert bench.ask(role, "set", top) == (0,)
    assert bench.ask(role, "set", 0.0) == (0,)


@pytest.mark.parametrize("role", OUTPUTS)
def test_limits_may_be_tightened_and_never_pass_the_hardware(role: str) -> None:
    bench, top = Bench(), MAXIMA[role]
    slew = 5.0 if role == "magnet" else 1e4
    assert bench.ask(role, "limits") == (0, top, slew, 0.0)
    for wrong in ((top * 1.01, 1.0, 0.0), (0.0, 1.0, 0.0), (top, 0.0, 0.0), (top, 1.0, -1.0), (top,), ()):
        assert bench.ask(role, "set_limits", *wrong) == (2,), wrong
    assert bench.ask(role, "limits") == (0, top, slew, 0.0)
    assert bench.ask(role, "set_limits", top / 2, 2 * slew, 3.0) == (0,)
    assert bench.ask(role, "limits") == (0, top / 2, slew, 3.0)
    assert bench.ask(role, "set", 0.51 * top) == (2,)
    assert bench.ask(role, "set", 0.49 * top) == (0,)
    assert bench.ask(role, "set_limits", top, slew, 0.0) == (0,)  # the hardware's own limit is kept apart
    assert bench.ask(role, "set", 0.51 * top) == (0,)


@pytest.mark.parametrize("role", OUTPUTS)
def test_a_device_slews_no_faster_than_the_limit_it_was_given(role: str) -> None:
    bench, top = Bench(), MAXIMA[role]
    slew = top / 20.0
    bench.ask("permit", "enable")
    assert bench.ask(role, "set_limits", top, slew, 0.0) == (0,)
    bench.ask(role, "enable")
    bench.ask(role, "set", top)
    bench.at(10.0)
    _, status, values = bench.report(role)
    reached = values[0] * (2 if role == "esa" else 1)
    assert reached == pytest.approx(top / 2, rel=0.03)
    assert status & 8
    bench.at(30.0)
    assert bench.report(role)[1] & 8 == 0


@pytest.mark.parametrize("role", OUTPUTS)
def test_a_watchdog_switches_off_a_device_that_is_not_heard_of(role: str) -> None:
    bench = Bench()
    bench.live()
    assert bench.ask(role, "set_limits", MAXIMA[role], 1e4, 2.0) == (0,)
    bench.at(30.0)  # heard every quarter second
    assert bench.happened(f"{role} watchdog") == []
    heard = bench.clock[0] - 0.25  # the last report before the clock was moved for good
    bench.report(role)
    bench.at(60.0, heard=False)
    fired = bench.happened(f"{role} watchdog")
    assert len(fired) == 1
    assert heard + 2.0 - 1e-9 <= fired[0] <= 32.0 + 1e-9
    assert not bench.report(role)[1] & 1
    others = {other: bench.report(other)[1] & 1 for other in OUTPUTS if other != role}
    assert all(others.values())  # theirs are off: nobody asked for them


def test_a_watchdog_that_is_shortened_holds_at_once() -> None:
    bench = Bench()
    bench.live()
    bench.ask("accelerating", "set_limits", 8500.0, 1e4, 500.0)
    bench.ask("accelerating", "set_limits", 8500.0, 1e4, 2.0)
    bench.at(20.0, heard=False)
    assert bench.happened("accelerating watchdog") == [12.0]
    bench.ask("accelerating", "enable")
    bench.ask("accelerating", "set_limits", 8500.0, 1e4, 0.0)  # and one that is given up does nothing
    bench.at(2000.0, heard=False)
    assert bench.happened("accelerating watchdog") == [12.0]
    assert bench.plant.supplies["accelerating"].enabled


@pytest.mark.parametrize("role", GATES)
def test_a_gate_is_not_ready_before_its_end_and_is_one_number_after(role: str) -> None:
    bench = Bench()
    assert bench.ask(role, "gate_read") == (5,)
    for wrong in ((0.0,), (-1.0,), (3601.0,), (math.nan,), (), (1.0, 1.0)):
        assert bench.ask(role, "gate", *wrong) == (2,), wrong
    bench.clock[0] = 2.0
    assert bench.ask(role, "gate", 0.5) == (0,)
    assert bench.report(role)[1] & 16
    bench.clock[0] = 2.49
    assert bench.ask(role, "gate_read") == (5,)
    bench.clock[0] = 2.5
    assert not bench.report(role)[1] & 16
    first = bench.ask(role, "gate_read")
    assert first[:4] == (0, 2.0, 2.5, 0.5)
    assert bench.ask(role, "gate_read") == first
    assert bench.ask(role, "gate", 0.5) == (0,)
    assert bench.ask(role, "gate_read") == (5,)  # a new gate forgets the old one


def test_too_much_beam_is_flagged() -> None:
    bench = Bench()
    bench.live()
    for ions, role, flag in (
        (4e6, "counter", 0.0),
        (6e6, "counter", 1.0),
        (49.0 / (1.602e-19 * 1e11), "electrometer", 0.0),
        (51.0 / (1.602e-19 * 1e11), "electrometer", 1.0),
    ):
        bench.plant.ions = lambda t, ions=ions: ions  # type: ignore[method-assign]
        bench.at(bench.clock[0] + 5.0)
        bench.ask(role, "gate", 1.0)
        bench.at(bench.clock[0] + 1.0)
        assert bench.ask(role, "gate_read")[5] == flag
    assert DETECTORS.rate_max == 5e6


# --- the chain -----------------------------------------------------------------------------------


def test_nothing_at_high_voltage_goes_on_while_the_permit_is_open() -> None:
    bench = Bench()
    for role in ("accelerating", "esa", "detector", "source"):
        assert bench.ask(role, "enable") == (5,)
        assert not bench.report(role)[1] & 1
    assert bench.ask("magnet", "enable") == (0,)
    assert bench.values("permit") == (0.0,)
    assert bench.ask("permit", "enable") == (0,)
    assert bench.values("permit") == (1.0,)
    for role in ("accelerating", "esa", "detector", "source"):
        assert bench.ask(role, "enable") == (0,)
        assert bench.report(role)[1] & 1


def test_an_open_permit_takes_high_voltage_and_source_and_leaves_the_magnet() -> None:
    bench = Bench()
    bench.live()
    assert bench.ask("permit", "disable") == (0,)
    assert [bench.report(role)[1] & 1 for role in ("accelerating", "esa", "detector", "source")] == [0] * 4
    assert bench.report("magnet")[1] & 1
    bench.at(15.0)
    assert bench.values("magnet")[0] == pytest.approx(4.0, abs=1e-4)
    # RC decay with half a second for five seconds
    assert bench.values("accelerating")[0] == pytest.approx(8000.0 * math.exp(-10.0), abs=0.5)
    assert bench.happened("permit open") == [10.0]


@pytest.mark.parametrize("name", ["cover_a", "cover_b", "emergency_stop"])
def test_the_hardwired_chain_cuts_after_fifty_milliseconds(name: str) -> None:
    bench = Bench()
    bench.live()
    bench.plant.set_input(10.0, name, 0.0)
    assert bench.ask("source", "enable") == (5,)
    bench.clock[0] = 10.049
    assert bench.report("accelerating")[1] & 1
    bench.clock[0] = 10.051
    assert not bench.report("accelerating")[1] & 1
    assert bench.happened("chain cut") == [pytest.approx(10.05)]
    assert bench.report("magnet")[1] & 1
    assert bench.ask("accelerating", "enable") == (5,)
    bench.plant.set_input(11.0, name, 1.0)
    assert not bench.report("accelerating")[1] & 1  # closing again switches nothing on
    assert bench.ask("accelerating", "enable") == (0,)


@pytest.mark.parametrize("name", ["thermostat", "mains"])
def test_what_is_not_in_the_chain_cuts_nothing(name: str) -> None:
    bench = Bench()
    bench.live()
    bench.plant.set_input(10.0, name, 0.0)
    bench.at(12.0)
    assert bench.report("accelerating")[1] & 1
    assert bench.happened("chain cut") == []


def test_a_plant_without_a_chain_leaves_a_cover_to_the_program() -> None:
    bench = Bench(services=ServicesSpec(hardwired_chain=False))
    bench.live()
    bench.plant.set_input(10.0, "cover_a", 0.0)
    bench.at(12.0)
    assert bench.report("accelerating")[1] & 1
    bench.ask("permit", "disable")
    assert not bench.report("accelerating")[1] & 1


# --- identity and link ---------------------------------------------------------------------------


def test_each_device_says_what_it_is_and_counts_its_samples() -> None:
    bench = Bench()
    for number, role in enumerate(ROLES):
        twin = bench.world.twins[role]
        assert twin.identity() == ("Trackfield", f"M-{role}", f"S-{number}", "1.0", True)
        assert [twin.report()[0] for _ in range(3)] == [1, 2, 3]


def test_an_unreliable_link_loses_and_garbles_the_stated_share() -> None:
    """Binomial: 3000 reports with 2 % late and 1 % garbled."""
    bench = Bench(late_reply=0.02, garbled_reply=0.01)
    replies = [bench.report("water") for _ in range(3000)]
    lost = sum(reply is None for reply in replies) / 3000
    assert lost == pytest.approx(0.02, abs=4 * math.sqrt(0.02 / 3000))
    good = sum(
        isinstance(r, tuple) and len(r) == 3 and len(r[2]) == 2 and 0 < r[2][0] < 1 for r in replies
    )  # fmt: skip
    assert 1 - lost - good / 3000 == pytest.approx(0.01, abs=4 * math.sqrt(0.01 / 3000))


def test_one_seed_gives_one_record() -> None:
    def record(seed: int) -> list[object]:
        bench = Bench(seed=seed, late_reply=0.01, garbled_reply=0.01)
        bench.live()
        return [str(bench.report(role)) for role in ROLES for _ in range(20)]

    assert record(3) == record(3)
    assert record(3) != record(4)


def test_a_device_that_is_polled_more_often_leaves_the_others_noise_alone() -> None:
    """One generator a device: who asks the water does not change the vacuum."""
    one, other = Bench(), Bench()
    for _ in range(2000):
        one.report("water")
    for role in ROLES:
        if role != "water":
            assert one.values(role) == other.values(role)
