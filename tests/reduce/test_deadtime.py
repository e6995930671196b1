"""Dead time against scipy's Lambert W, against simulated pulse trains, and against its own inverse."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import lambertw

from controller.reduce.deadtime import fano_factor, true_rate_variances, true_rates

TAU = 20e-9


def test_inverse_of_the_text_book_numbers():
    # 1e6/(1 + 0.02) and 1e6 exp(-0.02), by hand
    assert true_rates(np.array([980392.1568627451]), TAU, "non-paralyzable")[0] == pytest.approx(
        1e6, rel=1e-12
    )
    assert true_rates(np.array([980198.6733067553]), TAU, "paralyzable")[0] == pytest.approx(1e6, rel=1e-12)


def test_paralyzable_inverse_against_scipy_lambertw():
    observed = np.concatenate([[0.0], np.geomspace(1.0, 0.9999 / (math.e * TAU), 200)])
    expected = -lambertw(-observed * TAU).real / TAU
    np.testing.assert_allclose(true_rates(observed, TAU, "paralyzable"), expected, rtol=1e-11)


def test_paralyzable_maximum_itself():
    # a double root: half the digits are all that anybody can have
    top = true_rates(np.array([math.exp(-1.0) / TAU]), TAU, "paralyzable")[0]
    assert top == pytest.approx(1 / TAU, rel=1e-6)


def test_impossible_rates_are_marked_not_clamped():
    assert np.isnan(true_rates(np.array([1 / TAU, 2 / TAU]), TAU, "non-paralyzable")).all()
    assert np.isnan(true_rates(np.array([0.368 / TAU, 1 / TAU]), TAU, "paralyzable")).all()


@given(st.floats(0, 0.95), st.floats(1e-9, 1e-6), st.sampled_from(["non-paralyzable", "paralyzable"]))
def test_forward_and_back(busy, tau, kind):
    n = busy / tau
    m = n / (1 + busy) if kind == "non-paralyzable" else n * math.exp(-busy)
    assert true_rates(np.array([m]), tau, kind)[0] == pytest.approx(n, rel=1e-9, abs=1e-9)


def test_a_dead_time_shifted_below_zero_stays_defined():
    # the uncertainty's lower shift may pass zero; the law is analytic there
    for kind in ("non-paralyzable", "paralyzable"):
        m = np.array([1e5])
        high, low = true_rates(m, 1e-9, kind), true_rates(m, -1e-9, kind)
        assert (high + low)[0] / 2 == pytest.approx(1e5, rel=1e-7)


def _simulated_counts(kind: str, n: float, seconds: float, trials: int) -> np.ndarray:
    """Counts in a gate from simulated arrival times; the gate opens after a run-in of 20 dead times."""
    rng = np.random.default_rng(5)
    run_in = 20 * TAU
    size = int(n * (seconds + run_in) * 1.2) + 100
    counts = []
    for _ in range(trials):
        gaps = rng.exponential(1 / n, size)
        if kind == "non-paralyzable":
            times = np.cumsum(gaps + TAU)  # after each recorded pulse: dead, then an exponential wait
        else:
            times = np.cumsum(gaps)[gaps > TAU]  # recorded only after a gap longer than the dead time
        assert times[-1] > seconds + run_in
        counts.append(np.count_nonzero((times > run_in) & (times < run_in + seconds)))
    return np.array(counts)


@pytest.mark.parametrize("kind", ["non-paralyzable", "paralyzable"])
def test_counts_are_sub_poisson_as_renewal_theory_says(kind):
    n, seconds = 5e6, 0.2e-3
    counts = _simulated_counts(kind, n, seconds, 4000)
    busy = n * TAU
    mean = n / (1 + busy) if kind == "non-paralyzable" else n * math.exp(-busy)
    assert counts.mean() == pytest.approx(mean * seconds, rel=1e-3)
    fano = counts.var(ddof=1) / counts.mean()
    expected = float(fano_factor(np.array([n]), TAU, kind)[0])
    # renewal theory at n tau = 0.1: 1/1.1^2 and 1 - 0.2 exp(-0.1)
    assert expected == pytest.approx({"non-paralyzable": 0.826446, "paralyzable": 0.819033}[kind], abs=1e-6)
    assert fano == pytest.approx(expected, rel=0.08)  # 4000 trials: standard error 2.2 %
    corrected = true_rates(counts / seconds, TAU, kind)
    predicted = float(true_rate_variances(np.array([n]), np.array([seconds]), TAU, kind)[0])
    assert corrected.std(ddof=1) == pytest.approx(math.sqrt(predicted), rel=0.04)


def test_uncertainty_of_a_corrected_rate():
    # sqrt((1 + n tau)/(n t)) = 469.042 ppm; paralyzable by error propagation of its Fano factor 472.757 ppm
    n, t = np.array([5e6]), np.array([1.0])
    for kind, ppm in (("non-paralyzable", 469.0416), ("paralyzable", 472.757)):
        u = math.sqrt(true_rate_variances(n, t, TAU, kind)[0]) / 5e6
        assert u * 1e6 == pytest.approx(ppm, rel=1e-5)
