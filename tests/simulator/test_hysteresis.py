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


@settings(max_examples=200, deadline=None)
@given(INPUTS, st.floats(0.01, 3.9))
def test_wiping_out_a_larger_extremum_erases_what_was_inside(inputs: list[float], top: float) -> None:
    """Mayergoyz: return-point memory. The way inside a closed excursion leaves no trace."""
    start = [4.5, -4.5, top]
    inside = [max(-4.4, min(u, top * 0.999)) for u in inputs]
    assert outputs([*start, *inside, top])[-1] == pytest.approx(outputs(start)[-1], abs=1e-12)


@settings(max_examples=200, deadline=None)
@given(INPUTS)
def test_congruent_loops_have_one_height_whatever_came_before(inputs: list[float]) -> None:
    """Mayergoyz: congruency."""
    found = outputs([*inputs, -0.3, 0.4, -0.3, 0.4])
    assert abs(found[-1] - found[-2]) == pytest.approx(0.05994811632, abs=1e-9)


@settings(max_examples=100, deadline=None)
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
