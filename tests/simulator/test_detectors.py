"""Counter and electrometer against renewal theory, scipy and simulated pulse trains."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from plants import DETECTORS, Bench
from scipy import constants as codata
from scipy.integrate import quad, solve_ivp
from scipy.special import lambertw
from scipy.stats import poisson

from simulator.detectors import Counter, Electrometer, mean_rate
from simulator.spec import DetectorSpec

PARALYZABLE = replace(DETECTORS, paralyzable=True)


def counter(spec: DetectorSpec = DETECTORS, seed: int = 6) -> Counter:
    return Counter(spec, np.random.default_rng(seed))


@pytest.mark.parametrize(
    ("n", "plain", "paralyzable"),
    [
        (1e5, 99_800.399, 99_800.200),
        (1e6, 980_392.157, 980_198.673),
        (5e6, 4_545_454.5, 4_524_187.1),
        (1e7, 8_333_333.3, 8_187_307.5),
    ],
)
def test_observed_rates_at_20_ns(n: float, plain: float, paralyzable: float) -> None:
    """n/(1 + n tau), and the rate whose inverse is -W0(-m tau)/tau by scipy.special.lambertw."""
    assert counter().observed_rate(n) == pytest.approx(plain, rel=2e-8)
    observed = counter(PARALYZABLE).observed_rate(n)
    assert observed == pytest.approx(paralyzable, rel=2e-8)
    assert -lambertw(-observed * 20e-9, 0).real / 20e-9 == pytest.approx(n, rel=1e-8)


def pulses(rng: np.random.Generator, n: float, tau: float, seconds: float, *, extending: bool) -> int:
    """Pulses that a dead time lets through, one by one: the definition."""
    gaps = rng.exponential(1 / n, int(n * seconds * 1.2) + 50)
    times = np.cumsum(gaps)
    times = times[times < seconds]
    if extending:
        return int((np.diff(times, prepend=-1.0) > tau).sum())
    seen, free = 0, 0.0
    for t in times.tolist():
        if t >= free:
            seen, free = seen + 1, t + tau
    return seen


@pytest.mark.parametrize(("spec", "fano"), [(DETECTORS, 0.82645), (PARALYZABLE, 0.81903)])
def test_counts_spread_less_than_poisson(spec: DetectorSpec, fano: float) -> None:
    """Renewal theory: Fano factor 1/(1 + n tau)^2, or 1 - 2 n tau e^(-n tau); 4000 gates of 1 ms."""
    one = counter(spec)
    counts = np.array([one.draw(5e6, 1e-3) for _ in range(4000)])
    assert counts.var(ddof=1) / counts.mean() == pytest.approx(fano, rel=0.05)
    assert counts.mean() == pytest.approx(one.observed_rate(5e6) * 1e-3, abs=4 * math.sqrt(4545 / 4000))
    assert all(count == round(count) for count in counts)


@pytest.mark.parametrize("spec", [DETECTORS, PARALYZABLE])
def test_counts_are_those_of_a_simulated_pulse_train(spec: DetectorSpec) -> None:
    """Exponential gaps by numpy, thinned by the dead time pulse by pulse: 1500 gates of 0.2 ms."""
    one, rng = counter(spec), np.random.default_rng(11)
    drawn = np.array([one.draw(5e6, 2e-4) for _ in range(1500)])
    made = np.array([pulses(rng, 5e6, 20e-9, 2e-4, extending=spec.paralyzable) for _ in range(1500)])
    assert drawn.mean() == pytest.approx(made.mean(), abs=4 * math.sqrt(2 * 750 / 1500))
    assert drawn.var() == pytest.approx(made.var(), rel=4 * math.sqrt(2 * 2 / 1500))


def test_a_low_rate_is_poisson_and_never_quiet_when_dark_counts_are_there() -> None:
    """scipy.stats.poisson at an expectation of 2.5, dark counts included."""
    one = counter(replace(DETECTORS, dark_rate=0.5))
    counts = np.array([one.draw(24.5, 0.1) for _ in range(8000)])
    for k in range(8):
        expected = float(poisson(2.5).pmf(k))
        assert (counts == k).mean() == pytest.approx(expected, abs=4 * math.sqrt(expected / 8000)), k
    dark = np.array([one.draw(0.0, 10.0) for _ in range(2000)])
    assert dark.mean() == pytest.approx(5.0, rel=0.04)


def test_the_hidden_dead_time_scatters_about_the_stated_one_and_is_never_negative() -> None:
    stated = replace(DETECTORS, dead_time_u=0.5e-9)
    hidden = [counter(stated, seed).dead_time for seed in range(300)]
    assert np.mean(hidden) == pytest.approx(20e-9, abs=0.15e-9)
    assert np.std(hidden) == pytest.approx(0.5e-9, rel=0.15)
    assert min(counter(replace(stated, dead_time_u=1e-6), seed).dead_time for seed in range(30)) == 0.0


def test_the_multiplier_has_a_plateau() -> None:
    one = counter()
    assert one.efficiency(2200.0) == pytest.approx(1.0, abs=1e-6)
    assert one.efficiency(0.85 * 2200.0) == pytest.approx(0.5)
    assert one.efficiency(0.0) == 0.0
    assert 1e-4 < one.efficiency(0.80 * 2200.0) < 0.01


# --- electrometer --------------------------------------------------------------------------------


def meter(seed: int = 8, **changes: float) -> Electrometer:
    made = Electrometer(replace(DETECTORS, **changes), np.random.default_rng(seed))
    made.baseline = 0.0
    return made


@pytest.mark.parametrize(("resistance", "microvolts"), [(1e10, 9.102), (1e11, 28.782), (1e12, 91.02)])
def test_johnson_noise_of_a_mean_over_one_second(resistance: float, microvolts: float) -> None:
    """Johnson and Nyquist: bandwidth 1/(2 t) of a boxcar mean, variance 2 k T R/t; 3 % of 6000 means."""
    expected = math.sqrt(2 * codata.k * 300.0 * resistance)
    assert expected * 1e6 == pytest.approx(microvolts, rel=1e-4)
    one = meter(resistance=resistance)
    means = [one.draw(0.0, 1.0) for _ in range(6000)]
    assert np.std(means) == pytest.approx(expected, rel=0.03)
    quarter = [one.draw(0.0, 4.0) / 4.0 for _ in range(6000)]
    assert np.std(quarter) == pytest.approx(expected / 2, rel=0.03)


def test_shot_noise_equals_johnson_noise_at_2kt_over_e() -> None:
    """51.704 mV at 300 K whatever the resistor: scipy.constants."""
    volts = 2 * codata.k * 300.0 / codata.e
    assert volts == pytest.approx(51.704e-3, rel=1e-5)
    for resistance in (1e11, 1e12):
        one = meter(resistance=resistance, time_constant=0.0)
        ions = volts / (resistance * codata.e)
        totals = np.array([one.draw(ions, 1.0) for _ in range(6000)])
        assert totals.mean() == pytest.approx(volts, rel=1e-4)
        assert totals.std() == pytest.approx(math.sqrt(2 * 2 * codata.k * 300.0 * resistance), rel=0.03)


def test_one_volt_on_a_hundred_gigohm() -> None:
    """6.2415e7 elementary charges a second: 1/(e R) of CODATA."""
    assert meter().input_volts(6.2415091e7) == pytest.approx(1.0, rel=1e-8)
    gains = [Electrometer(replace(DETECTORS, gain_u=1e-3), np.random.default_rng(n)).gain for n in range(200)]
    assert np.std(gains) == pytest.approx(1e-3, rel=0.2)


def test_the_lag_is_a_single_pole_s_through_any_sequence_of_beams() -> None:
    """scipy.integrate.solve_ivp of tau dV/dt = V_in - V, piece by piece, and of its integral."""
    one = meter(kelvin=1e-15, resistance=1e11)
    volts = 0.0
    for start, end, ions in ((0.0, 0.3, 6e8), (0.3, 0.45, 6e4), (0.45, 0.5, 2e8), (0.5, 1.7, 5e5)):
        if end == 1.7:
            one.open_gate(0.5, 2e8)  # the beam that has flowed until now
            total = one.draw(ions, end - start)
        goal = one.input_volts(ions)
        found = solve_ivp(
            lambda t, y, goal=goal: [(goal - y[0]) / 0.1, y[0]],
            (start, end), [volts, 0.0], method="DOP853", rtol=1e-11, atol=1e-14,
        )  # fmt: skip
        volts, integral = float(found.y[0, -1]), float(found.y[1, -1])
        assert one.advance(end, ions) == pytest.approx(volts, rel=1e-8)
    shot = math.sqrt(5e5 * 1.2) * codata.e * 1e11
    assert total == pytest.approx(integral, abs=5 * shot)
    assert abs(total - goal * 1.2) > 100 * shot  # without the lag it would be far off


def test_looking_at_the_meter_during_a_gate_does_not_change_the_gate() -> None:
    totals = []
    for looks in (0, 5):
        one = meter()
        one.advance(1.0, 1e8)
        one.open_gate(1.0, 1e8)
        for number in range(looks):
            one.advance(1.1 + 0.1 * number, 1e5)
        totals.append(one.draw(1e5, 1.0))
    assert totals[0] == totals[1]


# --- gates ---------------------------------------------------------------------------------------


def test_a_mean_is_gauss_legendre_s_between_the_cuts() -> None:
    """scipy.integrate.quad; three points are exact to the fifth degree, and no further."""

    def rate(t: float) -> float:
        return 1e5 * math.exp(-t / 2) * (1 + 0.1 * math.sin(3 * t))

    whole, _ = quad(rate, 1.0, 2.0)
    assert mean_rate(rate, 1.0, 2.0) == pytest.approx(whole, rel=1e-4)
    assert mean_rate(rate, 1.0, 2.0, [1.25, 1.5, 1.75]) == pytest.approx(whole, rel=1e-7)
    assert mean_rate(lambda t: 6 * t**5, 0.0, 1.0) == pytest.approx(1.0, rel=1e-14)
    assert mean_rate(lambda t: 7 * t**6, 0.0, 1.0) != pytest.approx(1.0, rel=1e-4)
    step, _ = quad(lambda t: rate(t) if t > 1.37 else 0.0, 1.0, 2.0, points=[1.37])
    cut = mean_rate(lambda t: rate(t) if t > 1.37 else 0.0, 1.0, 2.0, [1.37])
    assert cut == pytest.approx(step, rel=1e-4)


def test_the_source_may_shut_in_the_middle_of_a_gate() -> None:
    """A gate of one second of which the beam flows 0.3: the plant cuts the integral at the command."""
    bench = Bench()
    bench.live()
    plant = bench.plant
    # put the axis on the beam, whatever the magnet does: 88Sr+ at 8 kV in the double-focusing train
    pass_volts = 960.0 / (2 * plant.beam.log_plates)
    on_axis = (
        math.sqrt(2 * 87.905063673 * codata.value("atomic mass constant") * pass_volts / codata.e) / 0.30
    )
    plant.magnet.tesla = lambda t: on_axis  # type: ignore[method-assign]
    full = plant.ions(11.0)
    assert full == pytest.approx(1e6, rel=1e-3)
    bench.at(11.0)
    assert bench.ask("counter", "gate", 1.0) == (0,)
    bench.at(11.3)
    bench.ask("source", "disable")
    bench.at(12.0)
    assert plant.mean_ions(11.0, 12.0) == pytest.approx(0.3 * full, rel=1e-6)
    code, start, end, live, total, over = bench.ask("counter", "gate_read")
    assert (code, start, end, live, over) == (0, 11.0, 12.0, 1.0, 0.0)
    assert total == pytest.approx(0.3e6, abs=5 * math.sqrt(0.3e6) + 0.3e6 * 0.02)
    assert bench.ask("counter", "gate_read")[4] == total  # a gate has one count, however often it is read
