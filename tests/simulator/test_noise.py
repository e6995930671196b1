"""Random processes as functions of time: size, band, no memory, no seam."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.signal import periodogram
from scipy.stats import kstest

from simulator.noise import BLOCK, TABLE, Normals, Wander


def wander(seed: int = 3, rms: float = 2.0, shortest: float = 1.0, longest: float = 50.0) -> Wander:
    return Wander(np.random.default_rng(seed), rms, shortest=shortest, longest=longest)


def knots(process: Wander, spacing: float = 0.25) -> np.ndarray:
    """One whole period at the table's own points, four to the shortest period."""
    return np.array([process(number * spacing) for number in range(TABLE)])


@pytest.mark.parametrize("rms", [1e-6, 2.0])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_rms_and_mean(seed: int, rms: float) -> None:
    process = wander(seed, rms)
    values = knots(process)
    assert values.std() == pytest.approx(rms, rel=1e-9)
    assert values.mean() == pytest.approx(0.0, abs=1e-9 * rms)
    between = np.array([process(float(t)) for t in np.linspace(0, 1000, 3001)])
    assert between.std() == pytest.approx(rms, rel=0.1)  # straight lines cut the corners a little


def test_power_lies_between_the_two_periods_and_falls_as_one_over_f() -> None:
    """scipy.signal.periodogram over one whole period of the table."""
    frequency, power = periodogram(knots(wander()), fs=4.0, detrend=False)
    inside = (frequency >= 1 / 50) & (frequency <= 1.0)
    assert power[~inside].max() < 1e-20 * power[inside].max()
    slope = np.polyfit(np.log(frequency[inside]), np.log(power[inside]), 1)[0]
    assert slope == pytest.approx(-1.0, abs=1e-6)


def test_the_order_of_asking_does_not_matter() -> None:
    rng = np.random.default_rng(5)
    times = rng.uniform(0, 5000, 400).tolist()
    one, other = wander(), wander()
    forward = {t: one(t) for t in sorted(times)}
    assert {t: other(t) for t in rng.permutation(times).tolist()} == forward
    assert {t: one(t) for t in times} == forward


def test_it_repeats_without_a_seam() -> None:
    process, period = wander(), TABLE / 4.0
    for t in (0.0, 0.1, 17.3, 1023.9):
        assert process(t + period) == pytest.approx(process(t), abs=1e-9)
        assert process(t + 7 * period) == pytest.approx(process(t), abs=1e-9)
    steps = np.diff([process(float(t)) for t in np.linspace(0, 2 * period, 80001)])
    seam = abs(process(period + 1e-6) - process(period - 1e-6))
    assert seam < 1e-4
    # a process of band limit 1/s and rms 2 is steep nowhere: its slope's rms is below 2 pi rms
    assert np.abs(steps).max() < 5 * 2 * math.pi * 2.0 * (2 * period / 80000)


def test_seeds_differ_and_no_noise_is_no_noise() -> None:
    assert wander(1)(3.3) == wander(1)(3.3)
    assert wander(1)(3.3) != wander(2)(3.3)
    assert wander(1, rms=0.0)(3.3) == 0.0


def test_normal_numbers_are_normal_across_blocks_and_repeat_by_seed() -> None:
    """Kolmogorov-Smirnov by scipy.stats over several blocks."""
    one, same = Normals(np.random.default_rng(4)), Normals(np.random.default_rng(4))
    values = [one() for _ in range(5 * BLOCK + 3)]
    assert values == [same() for _ in range(5 * BLOCK + 3)]
    assert len(set(values)) == len(values)
    assert kstest(values, "norm").pvalue > 0.01
