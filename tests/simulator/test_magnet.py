"""The magnet through ramps that its supply cannot follow, and its field at times long gone."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from plants import MAGNET
from scipy.integrate import solve_ivp

from simulator.magnet import SEGMENTS_KEPT, Magnet, Probe

PLAIN = replace(MAGNET, loop_tesla=0.0, eddy_amplitudes=(0.0,) * 3)


def magnet(seed: int = 4, **changes: object) -> Magnet:
    return Magnet(replace(PLAIN, **changes), np.random.default_rng(seed))


def duration(plant: Magnet, start: float) -> float:
    """When the magnet says that it has arrived, by halving."""
    low, high = start, start + 100.0
    assert plant.moving(low)
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if plant.moving(middle) else (low, middle)
    return high - start


@pytest.mark.parametrize(
    ("begin", "goal", "slew", "expected"),
    [
        (0.0, 10.0, 1e6, 0.693147),  # (L/R) ln(1/(1 - RI/V))
        (10.0, 0.0, 1e6, 0.405465),  # (L/R) ln(1 + RI/V)
        (0.0, 10.0, 5.0, 2.0),  # the compliance never binds
        (0.0, 18.0, 5.0, None),  # it binds above (V - L slew)/R = 15 A
        (0.0, 10.0, 15.0, None),  # and above 5 A
        (18.0, 1.0, 25.0, None),
    ],
)
def test_a_ramp_takes_what_the_circuit_equation_says(
    begin: float, goal: float, slew: float, expected: float | None
) -> None:
    """scipy.integrate.solve_ivp of L dI/dt = V - R I with both the slew and the compliance as bounds."""
    plant = magnet(slew=slew, amps_max=20.0)
    if begin:
        plant.command(0.0, begin)
    start, sign = 100.0, math.copysign(1.0, goal - begin)
    plant.command(start, goal)

    def rate(_: float, amps: np.ndarray) -> list[float]:
        return [sign * min(slew, (40.0 - sign * 2.0 * amps[0]) / 2.0)]

    def arrives(_: float, amps: np.ndarray) -> float:
        return float(amps[0]) - goal

    arrives.terminal = True  # type: ignore[attr-defined]
    found = solve_ivp(
        rate, (0, 50), [begin], events=arrives, dense_output=True, rtol=1e-10, atol=1e-12, max_step=0.01
    )
    seconds = float(found.t_events[0][0])
    assert duration(plant, start) == pytest.approx(seconds, rel=1e-6)
    if expected is not None:
        assert seconds == pytest.approx(expected, rel=1e-6)
    for share in (0.1, 0.35, 0.6, 0.85, 0.99):
        after = share * seconds
        assert plant.amps(start + after) == pytest.approx(float(found.sol(after)[0]), abs=1e-6)
        volts = 2.0 * rate(0.0, found.sol(after))[0] + 2.0 * float(found.sol(after)[0])
        assert plant.coil_volts(start + after) == pytest.approx(volts, abs=1e-4)
        assert abs(volts) <= 40.0 + 1e-9
    assert plant.amps(start + 1.01 * seconds) == goal
    assert plant.coil_volts(start + 1.01 * seconds) == 2.0 * goal


def test_a_set_point_has_the_supply_s_resolution() -> None:
    plant = magnet(resolution=1e-3)
    plant.command(0.0, 1.23456)
    assert plant.amps(10.0) == pytest.approx(1.235, abs=1e-12)


def test_eddy_modes_through_commands_that_interrupt_one_another() -> None:
    """solve_ivp of dx/dt = dI/dt - x/tau, three modes and the circuit as one system of equations."""
    amplitudes, taus = (0.02, 0.006, 0.0015), (0.06, 0.3, 1.5)
    plant = magnet(slew=12.0, amps_max=20.0, eddy_amplitudes=amplitudes, eddy_seconds=taus)
    commands = [(0.5, 12.0), (1.1, 3.0), (1.3, 14.0), (4.0, 14.0), (5.0, 0.0)]
    for t, goal in commands:
        plant.command(t, goal)
    state, edges = np.zeros(4), [*commands, (9.0, 0.0)]
    for (start, goal), (end, _) in pairwise(edges):
        sign = math.copysign(1.0, goal - state[0])

        def flow(
            _: float, y: np.ndarray, sign: float = sign, goal: float = goal, still: bool = False
        ) -> list[float]:
            rate = 0.0 if still else sign * min(12.0, (40.0 - sign * 2.0 * y[0]) / 2.0)
            return [rate, *(rate - x / tau for x, tau in zip(y[1:], taus, strict=True))]

        def arrives(_: float, y: np.ndarray, goal: float = goal, sign: float = sign) -> float:
            return (goal - float(y[0])) * sign

        arrives.terminal = True  # type: ignore[attr-defined]
        times, options = np.linspace(start, end, 24)[1:-1], {"rtol": 1e-9, "atol": 1e-12, "max_step": 0.005}
        if abs(goal - state[0]) < 1e-6:
            ramp_end = start
        else:
            moving = solve_ivp(flow, (start, end), state, events=arrives, dense_output=True, **options)
            state, ramp_end = moving.y[:, -1], float(moving.t[-1])
        rest = solve_ivp(
            lambda t, y, f=flow: f(t, y, still=True), (ramp_end, end), state, dense_output=True, **options
        ) if ramp_end < end else None  # fmt: skip
        for t in times:
            y = moving.sol(t) if t < ramp_end else rest.sol(t)  # type: ignore[union-attr]
            static = 4.0 * math.tanh(0.0915666 * y[0] / 4.0)
            lag = 0.0915666 * float(np.dot(amplitudes, y[1:]))
            assert plant.tesla(float(t)) == pytest.approx(static - lag, abs=3e-8), t
        state = state if rest is None else rest.y[:, -1]


def test_the_residue_of_a_ramp() -> None:
    """0.1 T in 0.5 s, one second after its end: 21.4727 uT by the closed form and by solve_ivp."""
    amplitudes, taus = (0.02, 0.004, 0.0006), (0.02, 0.15, 1.2)
    # a magnet so far from saturation that its field is its current, one tesla per ampere
    plant = magnet(
        slew=0.2, initial_tesla_per_amp=1.0, saturation=1e6, eddy_amplitudes=amplitudes, eddy_seconds=taus
    )
    plant.command(0.0, 0.1)
    a, tau = np.array(amplitudes), np.array(taus)
    found = solve_ivp(
        lambda t, x: (0.2 if t < 0.5 else 0.0) * a - x / tau, (0, 1.5), [0, 0, 0], max_step=1e-3, rtol=1e-9
    )
    residue = float(found.y[:, -1].sum())
    assert residue == pytest.approx(21.4727e-6, rel=1e-4)
    assert 0.1 - plant.tesla(1.5) == pytest.approx(residue, rel=1e-4)


def busy(seed: int, kind: str = "preisach") -> Magnet:
    spec = replace(
        MAGNET, hysteresis=kind, noise=1e-6, drift_per_hour=5e-6, law_spread=2e-3, shape_spread=0.1
    )
    plant = Magnet(spec, np.random.default_rng(seed))
    goals = np.random.default_rng(99).uniform(0.5, 9.5, 40)
    for number, goal in enumerate(goals):
        plant.command(1.7 * number, float(goal))
    return plant


@pytest.mark.parametrize("kind", ["preisach", "jiles-atherton"])
def test_the_past_is_the_same_in_whatever_order_it_is_asked(kind: str) -> None:
    times = np.linspace(0.0, 80.0, 331).tolist()
    shuffled = np.random.default_rng(7).permutation(times).tolist()
    first, second = busy(3, kind), busy(3, kind)
    in_order = {t: first.tesla(t) for t in times}
    assert {t: second.tesla(t) for t in shuffled} == in_order
    assert [first.amps(t) for t in shuffled] == [second.amps(t) for t in shuffled]


def test_what_was_seen_at_its_time_is_what_is_seen_looking_back() -> None:
    """A gate looks back over later commands: they do not change what has been."""
    watched, recalled = magnet(loop_tesla=4e-3), magnet(loop_tesla=4e-3)
    seen = {}
    for number in range(20):
        for plant in (watched, recalled):
            plant.command(1.0 * number, 1.0 + (number * 7 % 10) * 0.8)
        for share in (0.0, 0.2, 0.9):
            seen[number + share] = watched.tesla(number + share)
    assert {t: recalled.tesla(t) for t in seen} == seen


def test_looking_back_reaches_over_many_set_points() -> None:
    plant = magnet()
    for number in range(3 * SEGMENTS_KEPT):
        plant.command(float(number), float(number % 5))
    last = 3 * SEGMENTS_KEPT - 1
    for number in range(last - SEGMENTS_KEPT // 2 + 2, last):
        assert plant.amps(number + 0.999) == float(number % 5), number


def test_a_seed_is_an_instrument() -> None:
    one, same, other = busy(5), busy(5), busy(6)
    times = np.linspace(0, 70, 50)
    assert [one.tesla(t) for t in times] == [same.tesla(t) for t in times]
    assert all(one.tesla(t) != other.tesla(t) for t in times)
    assert one.eddy_seconds == same.eddy_seconds != other.eddy_seconds


def test_the_way_to_a_set_point_matters_and_a_full_cycle_makes_it_repeat() -> None:
    """Mayergoyz, wiping-out: after a cycle over the whole range the field at a current repeats."""
    fields = []
    for before in (0.0, 9.0, 5.5):
        plant = magnet(loop_tesla=4e-3)
        for number, amps in enumerate((before, 4.0, 10.0, 0.0, 4.0)):
            plant.command(20.0 * number, amps)
        fields.append((plant.tesla(39.0), plant.tesla(99.0)))
    assert fields[0][0] < fields[1][0] - 1e-4  # from above, the field is higher
    assert fields[0][1] == pytest.approx(fields[1][1], abs=1e-15)
    assert fields[0][1] == pytest.approx(fields[2][1], abs=1e-15)


def test_the_probe_hides_its_scale_and_adds_noise_to_each_sample() -> None:
    probe = Probe(replace(PLAIN, probe_noise=2e-6, probe_scale_spread=1e-4), np.random.default_rng(5))
    draw = np.random.default_rng(3).standard_normal
    samples = np.array([probe.reading(0.0, lambda t: 0.5, lambda: float(draw())) for _ in range(4000)])
    assert samples.std() == pytest.approx(2e-6, rel=0.05)
    assert samples.mean() / 0.5 - 1 == pytest.approx(probe.scale, abs=2e-5)
    assert abs(probe.scale) > 2e-5
    steady = Probe(PLAIN, np.random.default_rng(2))
    assert steady.reading(7.0, lambda t: 0.1 * t, lambda: 1.0) == pytest.approx(0.7, rel=1e-15)
