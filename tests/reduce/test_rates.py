"""Volts to ions, resistor noise, gates to dwells."""

from __future__ import annotations

import math

import numpy as np
import pytest
from reduce_samples import bench
from scipy import constants
from synthetic import Plan, Stop, rows

from controller.reduce.observations import collect
from controller.reduce.rates import dwell_rates, electrometer_rates


def test_one_volt_on_a_hundred_gigaohms():
    settings = bench().electrometer
    rate, _ = electrometer_rates(np.array([10.0]), np.array([10.0]), settings, 1.0)
    assert rate[0] == pytest.approx(1 / (1e11 * constants.e), rel=1e-12)  # 6.2415e7 ions a second
    half, _ = electrometer_rates(np.array([10.0]), np.array([10.0]), settings, 2.0)
    assert half[0] == pytest.approx(rate[0] / 2)


def test_resistor_noise_is_that_of_a_boxcar():
    """White noise of density 4kTR averaged over T: variance 2kTR/T (one-sided density, Nyquist)."""
    settings, seconds = bench().electrometer, 1.0
    _, variance = electrometer_rates(np.zeros(1), np.array([seconds]), settings, 1.0)
    volts = math.sqrt(variance[0]) * constants.e * 1e11
    assert volts == pytest.approx(math.sqrt(2 * constants.k * 300 * 1e11), rel=1e-9)
    assert volts == pytest.approx(28.782e-6, rel=1e-4)
    rng = np.random.default_rng(3)
    step = 1e-3
    samples = rng.normal(0, math.sqrt(4 * constants.k * 300 * 1e11 / (2 * step)), (3000, 1000))
    assert samples.mean(axis=1).std() == pytest.approx(volts, rel=0.04)


def test_shot_noise_equals_resistor_noise_at_52_millivolts():
    # 2 k T / e whatever the resistance (scipy.constants)
    settings, volts = bench().electrometer, 2 * constants.k * 300 / constants.e
    assert volts == pytest.approx(51.704e-3, rel=1e-4)
    _, quiet = electrometer_rates(np.zeros(1), np.ones(1), settings, 1.0)
    _, loud = electrometer_rates(np.array([volts]), np.ones(1), settings, 1.0)
    assert loud[0] == pytest.approx(2 * quiet[0], rel=1e-9)


def test_gates_of_a_dwell_make_the_same_rate_as_one_long_gate():
    stops = [Stop("206Pb+", 5e4, 2.0), Stop("208Pb+", 1e5, 1.0)]
    instrument = bench(dead=0.0)
    whole = collect(rows(Plan(stops, 1, 3, gates=4), np.random.default_rng(2)))
    rate, variance = dwell_rates(
        whole, instrument.counter, instrument.electrometer, dead_seconds=0.0, gain=1.0
    )
    assert len(rate) == 6
    counts = np.bincount(whole.gate_dwell, whole.gate_total)
    np.testing.assert_allclose(rate, counts / np.array([2.0, 1.0] * 3))
    np.testing.assert_allclose(variance, counts / np.array([4.0, 1.0] * 3))
    np.testing.assert_allclose(whole.mid[:2], [1.0 + 0.5 - 0.5, 3.5 - 0.5])
    np.testing.assert_allclose(whole.span[:2], [2.0, 1.0])
