"""Interpolation weights: the classic cycles, exactness on polynomials, and what the wrong ones cost."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from controller.reduce.drift import group_of, interpolation_weights, moments


def _weights(mids, degree, spans=None, variances=None):
    mids = [np.array(m, dtype=float) for m in mids]
    spans = [np.zeros_like(m) for m in mids] if spans is None else [np.array(s, dtype=float) for s in spans]
    return interpolation_weights(mids, spans, degree, variances)


def _lstsq(mids, degree):
    """The same conditions solved by numpy's least-norm solver, built the plain way."""
    a, b = (np.array(m, dtype=float) for m in mids)
    rows = [
        np.concatenate([np.ones(len(a)), np.zeros(len(b))]),
        np.concatenate([np.zeros(len(a)), np.ones(len(b))]),
    ]
    rows += [np.concatenate([a**k, -(b**k)]) for k in range(1, degree + 1)]
    return np.linalg.lstsq(np.array(rows), np.array([1.0, 1.0] + [0.0] * degree), rcond=None)[0]


@pytest.mark.parametrize(
    ("a", "b", "degree", "expected_a", "expected_b"),
    [
        ([0, 2], [1], 1, [1 / 2, 1 / 2], [1]),
        ([0, 2, 4], [1, 3], 1, [1 / 3, 1 / 3, 1 / 3], [1 / 2, 1 / 2]),
        ([0, 2, 4], [1, 3], 2, [1 / 8, 3 / 4, 1 / 8], [1 / 2, 1 / 2]),
        ([0, 2, 4], [1, 3], 3, [1 / 8, 3 / 4, 1 / 8], [1 / 2, 1 / 2]),
        ([0, 3, 6], [1, 4], 2, [0.25, 17 / 24, 1 / 24], [13 / 24, 11 / 24]),
    ],
)
def test_classic_cycles(a, b, degree, expected_a, expected_b):
    # moment equations by hand; the eighths are the second-degree coefficients of the cyclic
    # interpolation literature (Dodson 1978, from memory)
    wa, wb = _weights([a, b], degree)
    np.testing.assert_allclose(wa, expected_a, atol=1e-12)
    np.testing.assert_allclose(wb, expected_b, atol=1e-12)
    np.testing.assert_allclose(np.concatenate([wa, wb]), _lstsq([a, b], degree), atol=1e-11)


def test_nine_readings_of_second_degree():
    wa, wb = _weights([[-3, -1, 1, 3], [-4, -2, 0, 2, 4]], 2)
    np.testing.assert_allclose(wa, [0.291667, 0.208333, 0.208333, 0.291667], atol=1e-6)
    np.testing.assert_allclose(wb, [0.116667, 0.241667, 0.283333, 0.241667, 0.116667], atol=1e-6)


def test_what_first_degree_weights_leave_of_a_curved_drift():
    def beam(t):
        return 1 + 0.01 * t - 0.0004 * t**2

    a, b = np.array([-2.0, 0.0, 2.0]), np.array([-1.0, 1.0])
    # by hand: (1 - 0.0004) / (1 - 0.0004 x 8/3) - 1
    for degree, ppm in ((1, 667.378), (2, 0.0)):
        wa, wb = _weights([a, b], degree)
        error = (wb @ beam(b)) / (wa @ beam(a)) - 1
        assert error * 1e6 == pytest.approx(ppm, abs=0.1)


@settings(max_examples=60)
@given(
    degree=st.integers(0, 3),
    ions=st.integers(2, 4),
    extra=st.integers(0, 3),
    data=st.data(),
)
def test_any_polynomial_of_the_degree_cancels_also_with_unequal_dwells(degree, ions, extra, data):
    cycles = degree + 1 + extra
    dwell = [data.draw(st.floats(0.1, 5.0)) for _ in range(ions)]
    period = sum(dwell) + ions
    starts = [sum(dwell[:k]) + k for k in range(ions)]
    mids = [np.arange(cycles) * period + starts[k] + dwell[k] / 2 for k in range(ions)]
    spans = [np.full(cycles, dwell[k]) for k in range(ions)]
    length = cycles * period
    drift = [data.draw(st.floats(-0.3, 0.3)) for _ in range(degree)]

    def integral(t):
        return t + sum(c * t ** (k + 2) / ((k + 2) * length ** (k + 1)) for k, c in enumerate(drift))

    variances = [data.draw(st.floats(0.01, 1.0)) for _ in range(ions)]
    weights = interpolation_weights(mids, spans, degree, variances)
    assert weights is not None
    means = []
    for k, w in enumerate(weights):
        low, high = mids[k] - dwell[k] / 2, mids[k] + dwell[k] / 2
        means.append(w @ ((integral(high) - integral(low)) / dwell[k]))
    np.testing.assert_allclose(means, means[0], rtol=1e-7)


def test_an_ion_that_costs_more_variance_is_moved_less():
    mids = [[0, 2, 4], [1, 3, 5]]
    even_a, even_b = _weights(mids, 1)
    cheap_a, dear_b = _weights(mids, 1, variances=[0.01, 1.0])
    assert np.sum(dear_b**2) < np.sum(even_b**2)
    assert np.sum(cheap_a**2) > np.sum(even_a**2)


def test_mean_of_t_squared_over_a_dwell():
    np.testing.assert_allclose(moments(np.array([3.0]), np.array([2.0]), 2)[:, 0], [3.0, 9.0 + 4.0 / 12])
    np.testing.assert_allclose(moments(np.array([3.0]), np.array([0.0]), 2)[:, 0], [3.0, 9.0])


def test_readings_that_cannot_be_made_simultaneous():
    assert _weights([[0], [1]], 1) is None


def test_groups_do_not_overlap_and_take_the_remainder_in():
    assert [group_of(cycle, 11, 3) for cycle in range(11)] == [0, 0, 0, 1, 1, 1, 2, 2, 2, 2, 2]
    assert [group_of(cycle, 2, 3) for cycle in range(2)] == [0, 0]
