"""Hysteresis: Mayergoyz' theorems, a brute-force relay grid, and an independent integration."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import dblquad, solve_ivp
from scipy.optimize import brentq

from simulator.hysteresis import JilesAtherton, Preisach

INPUTS = st.lists(st.floats(-4, 4, allow_nan=False), min_size=1, max_size=25)


def outputs(inputs: list[float]) -> list[float]:
    model = Preisach(1.0)
    state = model.start(())
    found = []
    for u in inputs:
        state = model.advance(state, u)
        found.append(model.output(state))
    return found


def test_the_stack_agrees_with_a_grid_of_relays() -> None:
    """Every relay by itself: the definition of the model, on a 600 x 600 grid of equal weights."""
    n = 600
    levels = np.log((np.arange(n) + 0.5) / (n - np.arange(n) - 0.5))  # equal probability cells
    up, down = np.meshgrid(levels, levels, indexing="ij")
    weight = np.where(up > down, 2.0, np.where(up == down, 1.0, 0.0))
    weight /= weight.sum()
    state = -np.ones_like(weight)
    inputs = np.random.default_rng(2).uniform(-3, 3, 60).tolist()
    for u, found in zip(inputs, outputs(inputs), strict=True):
        state[u >= up] = 1.0
        state[u <= down] = -1.0
        assert found == pytest.approx(float((weight * state).sum()), abs=3.0 / n)


def test_the_everett_function_is_the_integral_of_the_density() -> None:
    """scipy.integrate.dblquad of 2 f(a) f(b) over the triangle between two inputs."""

    def density(x: float) -> float:
        return math.exp(-x) / (1 + math.exp(-x)) ** 2

    low, high = -0.7, 1.3
    integral, _ = dblquad(lambda b, a: 2 * density(a) * density(b), low, high, lambda a: low, lambda a: a)
    before, after = outputs([4.0, low, high])[-2:]
    assert (after - before) / 2 == pytest.approx(integral, rel=1e-9)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(INPUTS, st.floats(0.01, 3.9))
def test_wiping_out_a_larger_extremum_erases_what_was_inside(inputs: list[float], top: float) -> None:
    """Mayergoyz: return-point memory. The way inside a closed excursion leaves no trace."""
    start = [4.5, -4.5, top]
    inside = [max(-4.4, min(u, top * 0.999)) for u in inputs]
    assert outputs([*start, *inside, top])[-1] == pytest.approx(outputs(start)[-1], abs=1e-12)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(INPUTS)
def test_congruent_loops_have_one_height_whatever_came_before(inputs: list[float]) -> None:
    """Mayergoyz: congruency."""
    found = outputs([*inputs, -0.3, 0.4, -0.3, 0.4])
    assert abs(found[-1] - found[-2]) == pytest.approx(0.05994811632, abs=1e-9)


@settings(max_examples=100, deadline=None, derandomize=True)
@given(INPUTS)
def test_the_output_never_falls_while_the_input_rises(inputs: list[float]) -> None:
    found = outputs(inputs)
    for (u0, p0), (u1, p1) in zip(
        zip(inputs, found, strict=True), zip(inputs[1:], found[1:], strict=True), strict=False
    ):
        assert (p1 - p0) * (u1 - u0) >= -1e-12


def test_coercivity_and_remanence_of_the_logistic_density() -> None:
    """ln(1 + sqrt 2) and one half: algebra on the product density."""
    assert outputs([50.0, 0.0])[-1] == pytest.approx(0.5, abs=1e-9)
    crossing = brentq(lambda u: outputs([50.0, -50.0, u])[-1], 0.1, 3.0, xtol=1e-12)
    assert crossing == pytest.approx(math.log(1 + math.sqrt(2)), rel=1e-9)


def test_jiles_atherton_agrees_with_an_adaptive_integration() -> None:
    """The 1986 form, written again here, integrated by scipy; the classical parameters (from memory)."""
    ms, a, alpha, k, c = 1.6e6, 1100.0, 1.6e-3, 400.0, 0.2

    def slope(h: float, m: float, sign: float) -> float:
        x = (h + alpha * m) / a
        langevin = x / 3 if abs(x) < 1e-4 else 1 / math.tanh(x) - 1 / x
        derivative = 1 / 3 if abs(x) < 1e-4 else 1 / x**2 - 1 / math.sinh(x) ** 2
        gap = ms * langevin - m
        moving = gap / (k * sign - alpha * gap) if gap * sign > 0 else 0.0
        return (moving + c * ms / a * derivative) / (1 + c)

    h, m, reversal = 0.0, 0.0, []
    for goal in (5000.0, -5000.0, 5000.0, -5000.0, 0.0):
        sign = math.copysign(1.0, goal - h)
        found = solve_ivp(
            lambda t, y, s=sign: [slope(t, y[0], s)], (h, goal), [m], method="LSODA", rtol=1e-10, atol=1e-3
        )
        h, m = goal, float(found.y[0, -1])
        reversal.append(m)
    model = JilesAtherton(field_per_input=1.0)
    state = model.start((5000.0, -5000.0, 5000.0, -5000.0, 0.0))
    assert model.magnetisation(state) == pytest.approx(reversal[-1], rel=1e-4)
    assert abs(reversal[-1]) == pytest.approx(587472, rel=1e-4)


# An alternating sequence for the product logistic density, and its outputs from negative saturation.
SEQUENCE = [2, -1, 1.2, -0.3, 0.6, 0.1, 1.5, -2, 0.7, -0.2, 3]
SEQUENCE_OUTPUTS = [
    0.551607, -0.197128, 0.302039, 0.066786, 0.163673, 0.134547,
    0.404869, -0.608444, -0.005676, -0.100743, 0.814795,
]  # fmt: skip


def test_the_reference_sequence_on_a_grid_of_relays_and_on_the_stack() -> None:
    """Mayergoyz' definition: 400 x 400 relays, each by itself, cells of equal weight.

    Tolerance 1/N of the output's range of two: the inputs lie between the levels of the grid.
    """
    n = 400
    middle = (np.arange(n) + 0.5) / n
    levels = np.log(middle / (1 - middle))  # quantiles of the logistic density
    up, down = levels[:, None], levels[None, :]
    weight = np.where(up > down, 2.0, np.where(up == down, 1.0, 0.0)) / n**2
    state = np.full((n, n), -1.0)
    stack = outputs([float(u) for u in SEQUENCE])
    for u, found, reference in zip(SEQUENCE, stack, SEQUENCE_OUTPUTS, strict=True):
        state = np.where(up <= u, 1.0, np.where(down >= u, -1.0, state))
        assert float((weight * state).sum()) == pytest.approx(found, abs=2 * (1 / n))
        assert found == pytest.approx(reference, abs=1e-6)


@settings(max_examples=100, deadline=None, derandomize=True)
@given(INPUTS, st.floats(0.2, 5.0))
def test_the_width_only_scales_the_input(inputs: list[float], sigma: float) -> None:
    """Of the product density: an output depends on u/sigma alone; coercivity is sigma ln(1 + sqrt 2)."""
    model = Preisach(sigma)
    state = model.start(())
    for u, expected in zip(inputs, outputs(inputs), strict=True):
        state = model.advance(state, u * sigma)
        assert model.output(state) == pytest.approx(expected, abs=1e-9)
    coercive = model.start((60 * sigma, -60 * sigma, 0.8813735870 * sigma))
    assert model.output(coercive) == pytest.approx(0.0, abs=1e-9)


@settings(max_examples=100, deadline=None, derandomize=True)
@given(INPUTS, st.lists(st.floats(0, 1), max_size=6))
def test_it_does_not_matter_in_how_many_steps_an_input_is_reached(
    inputs: list[float], parts: list[float]
) -> None:
    """Rate independence: the classical scalar model has no time."""
    fine: list[float] = []
    for u in inputs:
        last = fine[-1] if fine else -5.0
        fine += [*sorted((last + part * (u - last) for part in parts), reverse=u < last), u]
    assert outputs(fine)[-1] == pytest.approx(outputs(inputs)[-1], abs=1e-9)


def test_a_state_that_was_kept_is_not_changed_by_what_comes_after() -> None:
    model = Preisach(1.0)
    kept = model.start((2.0, -1.0, 0.5))
    before = model.output(kept)
    later = model.advance(model.advance(kept, 3.0), -3.0)
    assert model.output(later) != before
    assert model.output(kept) == before
    assert model.output(model.advance(kept, 2.0)) == pytest.approx(0.551607, abs=1e-6)


def test_the_coercive_field_of_the_jiles_atherton_loop() -> None:
    """407.334 A/m and 587 472 A/m at 5 kA/m: scipy's event finder on the 1986 form, written again here."""

    def langevin(x: float) -> tuple[float, float]:
        if abs(x) < 1e-2:  # Taylor
            return x / 3 - x**3 / 45, 1 / 3 - x**2 / 15
        return 1 / math.tanh(x) - 1 / x, 1 / x**2 - 1 / math.sinh(x) ** 2

    def slope(h: float, y: np.ndarray, sign: float) -> list[float]:
        value, derivative = langevin((h + 1.6e-3 * y[0]) / 1100.0)
        gap = 1.6e6 * value - y[0]
        jump = gap / (400.0 * sign - 1.6e-3 * gap) if gap * sign > 0 else 0.0
        return [(jump + 0.2 * 1.6e6 / 1100.0 * derivative) / 1.2]

    def crosses(h: float, y: np.ndarray, sign: float) -> float:
        return float(y[0])

    h, m, coercive, remanent = 0.0, 0.0, 0.0, 0.0
    for goal in (5000.0, -5000.0, 5000.0, -5000.0, 5000.0):
        sign = math.copysign(1.0, goal - h)
        found = solve_ivp(
            slope, (h, goal), [m], args=(sign,), method="LSODA", rtol=1e-9, atol=1e-3,
            events=crosses, dense_output=True, max_step=50.0,
        )  # fmt: skip
        h, m = goal, float(found.y[0, -1])
        coercive, remanent = float(found.t_events[0][-1]), float(found.sol(0.0)[0])
    assert coercive == pytest.approx(407.334, rel=1e-5)
    assert remanent == pytest.approx(-587472, rel=1e-5)
    model = JilesAtherton(field_per_input=500.0)  # 5 kA/m at an input of 10
    loop = model.start((10.0, -10.0, 10.0, -10.0))
    assert model.magnetisation(model.advance(loop, coercive / 500.0)) == pytest.approx(0.0, abs=50.0)
    assert model.magnetisation(model.advance(loop, 0.0)) == pytest.approx(remanent, rel=1e-5)
    assert model.output(model.advance(loop, 0.0)) == pytest.approx(-0.5, rel=2e-2)
