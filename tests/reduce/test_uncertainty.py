"""A strontium ratio with eight input quantities, the way of JCGM 100, by three independent routes:
shifted inputs (ours), the package ``uncertainties`` (derivatives), and Monte Carlo (JCGM 101)."""

from __future__ import annotations

import math
from types import SimpleNamespace

import numpy as np
import pytest
import uncertainties
import uncertainties.umath
from reduce_samples import MASSES

from controller.reduce.deadtime import true_rates
from controller.reduce.massbias import corrected, exponent
from controller.reduce.uncertainty import combine, contributions, covariance

VALUES = {
    "o88": 800_000.0, "o86": 96_500.0, "o87": 69_000.0, "dead": 20e-9,
    "background": 0.5, "tail": 2e-6, "o85": 120.0, "rubidium": 0.3856,
}  # fmt: skip
U = {
    "o88": 40.0, "o86": 14.0, "o87": 12.0, "dead": 0.5e-9,
    "background": 0.05, "tail": 0.4e-6, "o85": 0.6, "rubidium": 0.0004,
}  # fmt: skip
M86, M87, M88 = (MASSES[f"{a}Sr+"] for a in (86, 87, 88))


def _intensities(x, rate):
    """True intensities at 86, 87, 88: dead time, background, tail of the upper neighbour, rubidium."""
    n88 = rate(x.o88, x.dead) - x.background
    n87_tail_free = rate(x.o87, x.dead) - x.background - x.tail * n88
    n86 = rate(x.o86, x.dead) - x.background - x.tail * n87_tail_free
    n87 = n87_tail_free - x.rubidium * (rate(x.o85, x.dead) - x.background)
    return n86, n87, n88


def _ours(values) -> np.ndarray:
    def rate(observed, dead):
        return float(true_rates(np.array([observed]), dead, "non-paralyzable")[0])

    n86, n87, n88 = _intensities(SimpleNamespace(**values), rate)
    beta = exponent(n86 / n88, 0.1194, M86, M88)
    return np.array([corrected(n87 / n86, M87, M86, beta), n87 / n86])


def _independent(x, log, exp):
    """The same model in one line of logarithms, for numbers, arrays and numbers with uncertainty."""
    n86, n87, n88 = _intensities(x, lambda o, tau: o / (1 - o * tau))
    share = math.log(M87 / M86) / math.log(M86 / M88)
    return exp(log(n87) - log(n86) + share * (math.log(0.1194) - log(n86) + log(n88)))


def test_strontium_budget_by_shifted_inputs():
    value = _ours(VALUES)[0]
    parts = {name: signed[0] for name, signed in contributions(_ours, VALUES, U).items()}
    total = combine(0.0, math.inf, list(parts.values()))
    with_u = SimpleNamespace(**{name: uncertainties.ufloat(VALUES[name], U[name]) for name in VALUES})
    theirs = _independent(with_u, uncertainties.umath.log, uncertainties.umath.exp)
    assert value == pytest.approx(theirs.n, rel=1e-12)
    assert total.u == pytest.approx(theirs.s, rel=1e-6)
    by_name = {id(getattr(with_u, name)): name for name in VALUES}
    for variable, part in theirs.error_components().items():
        assert abs(parts[by_name[id(variable)]]) == pytest.approx(part, rel=1e-4)
    # figures of two packages and a Monte Carlo run, kept to see that the model itself has not moved
    assert value == pytest.approx(0.71270253097, rel=1e-10)
    assert total.u == pytest.approx(1.938232e-4, rel=1e-5)
    assert total.expanded / total.u == pytest.approx(1.959964, rel=1e-6)


def test_strontium_budget_by_monte_carlo():
    rng = np.random.default_rng(10)
    draws = SimpleNamespace(**{name: rng.normal(VALUES[name], U[name], 400_000) for name in VALUES})
    y = _independent(draws, np.log, np.exp)
    total = combine(0.0, math.inf, [s[0] for s in contributions(_ours, VALUES, U).values()])
    assert y.std() == pytest.approx(total.u, rel=5e-3)
    low, high = np.quantile(y, [0.025, 0.975])
    assert (high - low) / 2 == pytest.approx(total.expanded, rel=1e-2)


def test_joint_covariance_of_two_ratios_that_share_their_inputs():
    rng = np.random.default_rng(9)
    draws = SimpleNamespace(**{name: rng.normal(VALUES[name], U[name], 200_000) for name in VALUES})
    n86, n87, _ = _intensities(draws, lambda o, tau: o / (1 - o * tau))
    sampled = np.cov(_independent(draws, np.log, np.exp), n87 / n86)
    joint = covariance(np.zeros((2, 2)), contributions(_ours, VALUES, U))
    np.testing.assert_allclose(joint, sampled, rtol=0.03)


def test_statistical_part_with_few_groups_widens_the_interval():
    total = combine(3.0, 4.0, [4.0])
    assert total.u == 5.0
    assert total.dof == pytest.approx(5.0**4 / (3.0**4 / 4))
    assert combine(3.0, 4.0, []).coverage == pytest.approx(2.776445, rel=1e-6)  # Student, 4, 95 %


def test_inputs_without_uncertainty_are_not_shifted():
    def fails(values):
        raise AssertionError("shifted for nothing")

    assert contributions(fails, {"a": 1.0}, {"a": 0.0}) == {}
