"""High-voltage supplies: slewing, settling, bleed-down, arcs, the chain, and what the read-back hides."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from plants import Bench, supply
from scipy.integrate import solve_ivp

from simulator.high_voltage import SEGMENTS_KEPT, Supply
from simulator.spec import SupplySpec

SPEC = SupplySpec(volts_max=1e4, slew=1e4, bleed=0.5, divider_spread=0.0, ripple=0.0)


def at(volts: float, **changes: float) -> Supply:
    """A supply that has been on at ``volts`` since time 0, settled by 10 s."""
    made = Supply(replace(SPEC, **changes), np.random.default_rng(3))
    made.enable(0.0)
    made.write(0.0, volts)
    return made


def test_bleed_down_is_that_of_a_capacitor_through_a_resistor() -> None:
    """10 kV to 50 V takes tau ln(200): RC decay, and scipy.integrate.solve_ivp of dV/dt = -V/tau."""
    one = at(1e4)
    one.disable(20.0)

    def safe(_: float, v: np.ndarray) -> float:
        return float(v[0]) - 50.0

    safe.terminal = True  # type: ignore[attr-defined]
    found = solve_ivp(lambda t, v: [-v[0] / 0.5], (0, 9), [1e4], events=safe, rtol=1e-11, atol=1e-9)
    seconds = float(found.t_events[0][0])
    assert seconds == pytest.approx(0.5 * math.log(200), rel=1e-8)
    assert one.nominal(20.0 + seconds) == pytest.approx(50.0, rel=1e-7)
    assert one.nominal(20.0 + 0.99 * seconds) > 50.0
    assert one.nominal(20.0) == 1e4


def test_a_step_slews_first_and_settles_after() -> None:
    """8 kV at 10 kV/s takes 0.8 s; then 2 % with 5 ms and 0.1 % with 100 ms remain (common practice)."""
    one = at(8000.0)
    assert one.nominal(0.4) == pytest.approx(0.5 * 8000.0 * (1 - 0.021), rel=1e-12)
    assert one.moving(0.799)
    assert not one.moving(0.801)
    for after in (0.0, 0.003, 0.02, 0.1, 0.4, 2.0):
        short = 0.02 * math.exp(-after / 0.005) + 0.001 * math.exp(-after / 0.1)
        assert one.nominal(0.8 + after) == pytest.approx(8000.0 * (1 - short), rel=1e-12), after
    assert one.nominal(0.8 + 0.1 * math.log(1e-3 / 1e-6)) == pytest.approx(8000.0 * (1 - 1e-6), rel=1e-9)
    assert one.nominal(30.0) == 8000.0


def test_a_new_set_point_starts_from_where_the_old_one_had_come() -> None:
    one = at(8000.0)
    before = one.nominal(0.3)
    one.write(0.3, 1000.0)
    assert one.nominal(0.3) == before
    assert one.nominal(0.3 + (before - 1000.0) / 1e4 + 5.0) == 1000.0
    assert one.nominal(0.2) == pytest.approx(0.25 * 8000.0 * 0.979, rel=1e-12)  # the past stays
    assert one.events_between(0.1, 0.5) == [0.3]
    assert one.events_between(0.3, 0.5) == []


def test_the_past_is_forgotten_only_after_many_commands() -> None:
    one = at(1000.0)
    for number in range(1, 3 * SEGMENTS_KEPT):
        one.write(float(number), 1000.0 + number % 7)
    last = 3 * SEGMENTS_KEPT - 1
    for number in range(last - SEGMENTS_KEPT // 2 + 2, last):
        assert one.nominal(number + 0.9999) == pytest.approx(1000.0 + number % 7, rel=1e-6)


def test_off_it_keeps_its_set_point_and_gives_nothing() -> None:
    one = Supply(SPEC, np.random.default_rng(3))
    one.write(0.0, 5000.0)
    assert one.nominal(9.0) == 0.0
    one.enable(10.0)
    assert one.nominal(20.0) == 5000.0


def test_the_divider_s_error_is_in_the_beam_and_not_in_the_read_back() -> None:
    bench = Bench(seed=4, accelerating=SupplySpec(8500.0, 1e4, 0.5, divider_spread=5e-4, ripple=0.0))
    bench.live()
    hidden = bench.world.hidden["accelerating_divider"]
    assert abs(hidden) > 5e-5
    readings = [bench.values("accelerating")[0] for _ in range(400)]
    assert np.mean(readings) == pytest.approx(8000.0, abs=4 * 5e-6 * 8500 / 20)
    truth = bench.plant.supplies["accelerating"].volts(10.0)
    assert truth / 8000.0 - 1 == pytest.approx(hidden, rel=1e-9)
    spread = [Supply(SupplySpec(1e3, 1e4, 0.5), np.random.default_rng(n)).divider for n in range(200)]
    assert np.std(spread) == pytest.approx(2e-4, rel=0.15)


def test_ripple_is_on_the_true_output_alone() -> None:
    one = at(8000.0, ripple=1e-5)
    times = np.linspace(100, 4000, 20001)
    volts = np.array([one.volts(float(t)) for t in times])
    assert volts.std() / 8000.0 == pytest.approx(1e-5, rel=0.1)
    assert {one.nominal(float(t)) for t in times} == {8000.0}


def test_an_arc_takes_the_output_away_and_trips_the_supply() -> None:
    bench = Bench()
    bench.live()
    one = bench.plant.supplies["accelerating"]
    one.arc(10.0)
    sequence, status, values = bench.report("accelerating")
    assert (status & 1, status & 4) == (0, 4)
    assert values[1] == 5e-3  # its over-current
    assert one.nominal(10.0) == 0.0
    bench.at(10.03)
    assert bench.values("accelerating")[1] < 1e-6
    assert bench.ask("accelerating", "enable") == (4,)
    bench.at(12.0)
    assert bench.plant.ions(12.0) == 0.0
    assert bench.ask("accelerating", "reset") == (0,)
    assert bench.report("accelerating")[1] & 5 == 0  # reset, and still off
    assert bench.ask("accelerating", "enable") == (0,)
    bench.at(20.0)
    assert one.nominal(20.0) == 8000.0
    assert sequence < bench.report("accelerating")[0]


def test_the_chain_cuts_every_supply_and_the_source_and_each_bleeds_down() -> None:
    bench = Bench(detector=supply(2500.0))
    bench.live()
    bench.plant.cut(10.0)
    for role, volts in (("accelerating", 8000.0), ("esa", 960.0), ("detector", 2200.0)):
        one = bench.plant.supplies[role]
        assert not one.enabled
        assert one.nominal(10.0 + 0.5 * math.log(4)) == pytest.approx(volts / 4, rel=1e-6)
    assert not bench.plant.source_open
    assert bench.plant.ions(10.001) == 0.0
    assert bench.plant.magnet.enabled
    assert bench.happened("chain cut") == [10.0]
