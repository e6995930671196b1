"""Centring on scans whose truth is known."""

from __future__ import annotations

import math

import numpy as np
import pytest

from controller.run.centring import NoPeak, ScanPoint, find_centre, scan_factors

BASE, EDGE = 400e-6, 80e-6  # full base and edge of a trapezoid, as fractions of mass


def trapezoid(offset: float) -> float:
    """Height of a flat-topped peak (slit images of textbook optics) at a mass offset."""
    return min(1.0, max(0.0, (BASE / 2 - abs(offset)) / EDGE))


def scan(
    centre: float, *, top: float = 1e5, floor: float = 0.0, drift: float = 0.0, points: int = 41
) -> list[ScanPoint]:
    factors = scan_factors(1.0, 300e-6, points)
    return [
        ScanPoint(f, floor + top * (1 + drift * i / points) * trapezoid(f - centre))
        for i, f in enumerate(factors)
    ]


@pytest.mark.parametrize("offset", [-60e-6, 0.0, 1e-6, 75e-6])
def test_the_centre_of_a_clean_peak_is_found(offset: float) -> None:
    centre = find_centre(scan(1 + offset), counts_per_signal=1.0)
    assert centre.factor == pytest.approx(1 + offset, abs=0.5e-6)
    assert centre.width == pytest.approx(BASE - EDGE, abs=2e-6)


def test_a_floor_under_the_peak_does_not_move_the_centre() -> None:
    clean = find_centre(scan(1 + 20e-6), counts_per_signal=1.0)
    raised = find_centre(scan(1 + 20e-6, floor=3e4), counts_per_signal=1.0)
    assert raised.factor == pytest.approx(clean.factor, abs=1e-9)


def test_visiting_up_and_back_cancels_a_linear_drift_of_the_beam() -> None:
    drift = 0.2  # the beam grows by a fifth during the scan
    interleaved = find_centre(scan(1.0, drift=drift), counts_per_signal=1.0)
    factors = sorted(scan_factors(1.0, 300e-6, 41))
    one_way = find_centre(
        [ScanPoint(f, 1e5 * (1 + drift * i / 41) * trapezoid(f - 1.0)) for i, f in enumerate(factors)],
        counts_per_signal=1.0,
    )
    assert abs(interleaved.factor - 1) < 5e-6
    assert abs(one_way.factor - 1) > abs(interleaved.factor - 1) / 1.5


def test_the_stated_uncertainty_covers_the_scatter_of_counting_noise() -> None:
    rng = np.random.default_rng(5)
    found, stated = [], []
    for _ in range(300):
        noisy = [ScanPoint(p.factor, float(rng.poisson(p.signal))) for p in scan(1.0, top=2000)]
        centre = find_centre(noisy, counts_per_signal=1.0)
        found.append(centre.factor)
        stated.append(centre.u)
    ratio = float(np.std(found)) / float(np.mean(stated))
    assert 0.5 < ratio < 2.0
    assert abs(float(np.mean(found)) - 1) < 3 * float(np.std(found)) / math.sqrt(300)


@pytest.mark.parametrize(
    ("points", "why"),
    [
        (scan(1.0, top=50), "below 100"),
        (scan(1 + 280e-6), "high side"),
        (scan(1 - 280e-6), "low side"),
    ],
)
def test_no_peak_is_said_not_guessed(points: list[ScanPoint], why: str) -> None:
    with pytest.raises(NoPeak, match=why):
        find_centre(points, counts_per_signal=1.0)
