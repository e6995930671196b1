"""Statistics against scipy, against series by hand and against simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.special
import scipy.stats
from hypothesis import given
from hypothesis import strategies as st

from controller.reduce import statistics
from controller.reduce.student import coverage_factor, incomplete_beta
from controller.route.dwell import counting_u


@given(st.floats(1, 1e5), st.floats(0.5, 0.999))
def test_coverage_factor_against_scipy(dof, probability):
    expected = scipy.stats.t.ppf(0.5 + probability / 2, dof)
    assert coverage_factor(dof, probability) == pytest.approx(expected, rel=1e-9)


@given(st.floats(0.3, 500), st.floats(0.3, 500), st.floats(0, 1))
def test_incomplete_beta_against_scipy(a, b, x):
    assert incomplete_beta(a, b, x) == pytest.approx(scipy.special.betainc(a, b, x), rel=1e-9, abs=1e-14)


def test_coverage_for_very_many_degrees_of_freedom_is_that_of_a_normal_distribution():
    assert coverage_factor(math.inf) == pytest.approx(scipy.stats.norm.ppf(0.975), rel=1e-12)


def test_welch_satterthwaite():
    # JCGM 100, example H.1 (end gauge): these contributions in nm give 16.7, truncated to 16
    parts = [(25.0, 18), (9.7, 25.6), (2.9, 50), (16.6, 2)]
    assert statistics.effective_dof(parts) == pytest.approx(16.7, abs=0.1)
    assert statistics.effective_dof([(1.0, math.inf)]) == math.inf


def test_standard_error_of_a_weighted_mean():
    rng = np.random.default_rng(1)
    weights = np.array([3.0, 3.0, 4.0, 3.0, 5.0, 3.0])
    values = rng.normal(0, 1 / np.sqrt(weights), (20_000, 6))
    means = values @ weights / weights.sum()
    claimed = [statistics.weighted_mean_error(row, weights) ** 2 for row in values]
    assert math.sqrt(np.mean(claimed)) == pytest.approx(means.std(), rel=0.02)
    # equal weights: s / sqrt(n)
    row = values[0]
    expected = row.std(ddof=1) / math.sqrt(6)
    assert statistics.weighted_mean_error(row, np.ones(6)) == pytest.approx(expected)


def test_autocorrelation_and_its_factor():
    rng = np.random.default_rng(2)
    series = [0.0]
    for kick in rng.standard_normal(40_000):
        series.append(0.5 * series[-1] + kick)
    rho = statistics.autocorrelation(np.array(series))
    assert rho == pytest.approx(0.5, abs=0.02)
    # AR(1): sqrt((1 + rho)/(1 - rho)), by hand 1.225 and 1.732
    assert statistics.inflation(0.2, 1000) == pytest.approx(1.2247, abs=1e-4)
    assert statistics.inflation(0.5, 1000) == pytest.approx(1.7321, abs=1e-4)
    assert statistics.inflation(0.2, 50) == 1.0  # not distinguishable from white
    assert statistics.inflation(-0.5, 50) == 1.0
    assert statistics.autocorrelation(np.array([1.0, 2.0, 3.0])) is None
    assert statistics.autocorrelation(np.ones(9)) is None


def test_the_factor_makes_correlated_groups_honest():
    rng = np.random.default_rng(4)
    means, claimed = [], []
    for _ in range(600):
        noise = rng.standard_normal(260)
        series = np.empty(260)
        value = 0.0
        for index, kick in enumerate(noise.tolist()):
            value = 0.4 * value + kick
            series[index] = value
        groups = series[60:]
        factor = statistics.inflation(statistics.autocorrelation(groups), len(groups))
        means.append(groups.mean())
        claimed.append(factor * statistics.weighted_mean_error(groups, np.ones(200)))
    assert np.std(means) == pytest.approx(np.mean(claimed), rel=0.08)


def test_reduced_chi2():
    rng = np.random.default_rng(3)
    counts = rng.poisson(400, 5000).astype(float)
    chi2 = statistics.reduced_chi2(counts, np.full(5000, 400.0), np.ones(5000))
    assert chi2 == pytest.approx(1.0, abs=0.06)
    assert statistics.reduced_chi2(counts[:1], counts[:1], np.ones(1)) is None
    assert statistics.reduced_chi2(counts[:2], np.zeros(2), np.ones(2)) is None


def test_counting_floor_by_formula_and_by_simulation():
    # sqrt((1/1e5 + 1/3e4)/100), by hand
    floor = counting_u([1, -1], [1e5, 1e4], [1.0, 3.0], 100)
    assert floor * 1e6 == pytest.approx(658.280, rel=1e-5)
    rng = np.random.default_rng(6)
    numerators, denominators = rng.poisson(1e7, 20_000), rng.poisson(3e6, 20_000)
    assert np.log(numerators / denominators).std() == pytest.approx(floor, rel=0.02)


def test_counting_floor_of_an_internally_normalised_ratio():
    # ln y = ln n87 - 0.496407 ln n86 - 0.503593 ln n88: the exponential law's coefficients
    coefficients = [1.0, -0.496407, -0.503593]
    floor = counting_u(coefficients, [69e3, 96.5e3, 800e3], [4.0, 2.0, 1.0], 100)
    by_hand = sum(
        c * c / (n * t) for c, n, t in zip(coefficients, [69e3, 96.5e3, 8e5], [4, 2, 1], strict=True)
    )
    assert floor == pytest.approx(math.sqrt(by_hand / 100), rel=1e-12)
    assert floor * 1e6 == pytest.approx(228.4, abs=0.1)


def test_mean_of_ratios_is_biased_and_ratio_of_sums_is_not():
    """Why intensities are averaged before dividing: E[1/B] N = 1 + 1/N + 2/N^2 + ... for Poisson B."""
    n = 1000
    k = np.arange(1, 2000)
    exact = float(np.sum(scipy.stats.poisson.pmf(k, n) * n / k)) / (1 - math.exp(-n)) - 1
    assert exact * 1e6 == pytest.approx(1002.006, rel=1e-4)
    rng = np.random.default_rng(8)
    a, b = rng.poisson(n, (400, 2000)), rng.poisson(n, (400, 2000))
    assert (a / b).mean() - 1 == pytest.approx(exact, abs=1e-4)
    sums = a.sum(axis=1) / b.sum(axis=1)
    assert abs(sums.mean() - 1) < 1e-4
