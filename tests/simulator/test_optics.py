"""What the beam makes of the optics: peak flanks, transmission, tails, signatures of wrong voltages."""

from __future__ import annotations

import math
from dataclasses import replace

import mendeleev
import numpy as np
import pytest
from plants import NOMINAL, OPTICS
from scipy import constants as codata
from scipy.optimize import brentq, fsolve
from scipy.stats import gamma, norm

from simulator.beam import Beam
from simulator.optics import NoFocus, angular_aberration, double_focus, energy_table, peak_table
from simulator.spec import OpticsSpec, SourceSpec, SpeciesSpec

C = replace(OPTICS, magnet_angle=math.pi / 3)
THERMAL = SourceSpec("thermal", temperature=2000.0)
KT = codata.k * 2000.0 / codata.e


def beam(
    *labels: str, optics: OpticsSpec = OPTICS, source: SourceSpec = THERMAL, rates: tuple[float, ...] = ()
) -> Beam:
    species = [SpeciesSpec(label, rate) for label, rate in zip(labels, rates or (1e6,) * 9, strict=False)]
    return Beam(optics, source, species, nominal_volts=NOMINAL, rng=np.random.default_rng(1))


def esa_volts(train: Beam, pass_volts: float = NOMINAL) -> float:
    """Plates of radii r1 r2 = r_e^2, r2 - r1 = gap: U = 2 V ln(r2/r1)."""
    inner = -0.0075 + math.hypot(0.25, 0.0075)
    return 2 * pass_volts * math.log((inner + 0.015) / inner)


def tesla_of(label: str, number: int, symbol: str, pass_volts: float = NOMINAL) -> float:
    """sqrt(2 m V/q)/r with the mass of the mendeleev package; the plain law, without relativity."""
    mass = mendeleev.isotope(symbol, number).mass - label.count("+") * codata.value("electron mass in u")
    kg = mass * codata.value("atomic mass constant")
    return math.sqrt(2 * kg * pass_volts / (label.count("+") * codata.e)) / 0.30


def flanks(train: Beam, guess: float, volts: float, accel: float) -> tuple[float, float]:
    """Fields at which the signal passes half its top, above and below ``guess``."""
    top = train.rate(0.0, guess, volts, accel)
    assert top > 0

    def excess(tesla: float) -> float:
        return train.rate(0.0, tesla, volts, accel) - top / 2

    reach = 4e-4 * guess
    return (
        brentq(excess, guess - reach, guess, xtol=1e-15),
        brentq(excess, guess, guess + reach, xtol=1e-15),
    )


def centre(train: Beam, guess: float, volts: float, accel: float = NOMINAL) -> float:
    return sum(flanks(train, guess, volts, accel)) / 2


# --- lengths -------------------------------------------------------------------------------------


def sectors(spec: OpticsSpec, between: float, image: float) -> np.ndarray:
    """The train, each element written out once more from textbook sector optics."""
    p, r_e = math.sqrt(2) * spec.esa_angle, spec.esa_radius
    c, s, r = math.cos(spec.magnet_angle), math.sin(spec.magnet_angle), spec.magnet_radius

    def straight(length: float) -> np.ndarray:
        return np.array([[1, length, 0], [0, 1, 0], [0, 0, 1]])

    plates = [
        [math.cos(p), r_e / math.sqrt(2) * math.sin(p), r_e / 2 * (1 - math.cos(p))],
        [-math.sqrt(2) / r_e * math.sin(p), math.cos(p), math.sin(p) / math.sqrt(2)],
        [0, 0, 1],
    ]
    poles = [[c, r * s, r / 2 * (1 - c)], [-s / r, c, s / 2], [0, 0, 1]]
    first = r_e / math.sqrt(2) / math.tan(p / 2)
    return np.asarray(straight(image) @ poles @ straight(between) @ plates @ straight(first))


@pytest.mark.parametrize(
    ("spec", "between", "image"), [(OPTICS, 0.28760044, 0.45), (C, 0.49174563, 0.4 * math.sqrt(3))]
)
def test_the_lengths_are_those_a_root_finder_finds(spec: OpticsSpec, between: float, image: float) -> None:
    """scipy.optimize.fsolve for (x:a) = (x:delta) = 0, for a magnet of 90 and one of 60 degrees."""
    found = fsolve(lambda v: sectors(spec, *v)[0, 1:3], (between * 1.1, image * 0.9), xtol=1e-13)
    layout = double_focus(spec)
    assert (layout.esa_to_magnet, layout.magnet_to_collector) == pytest.approx(tuple(found), abs=1e-9)
    assert found == pytest.approx([between, image], abs=1e-8)
    assert layout.total[0] == pytest.approx([1.5, 0.0, 0.0, 0.375], abs=1e-12)
    assert np.linalg.det(layout.total[:2, :2]) == pytest.approx(1.0, abs=1e-12)
    assert angular_aberration(spec, layout) == pytest.approx(0.25438, rel=5e-3)
    assert layout.energy_dispersion_at_slit == pytest.approx(0.25, rel=1e-12)


@pytest.mark.parametrize("radius", [0.5, 0.55, 2.0])
def test_a_magnet_of_twice_the_esa_radius_or_more_cannot_focus(radius: float) -> None:
    """r_m (1 + M) = 2 r_e M has a positive M for r_m < 2 r_e only: algebra."""
    with pytest.raises(NoFocus, match="not below twice"):
        double_focus(replace(OPTICS, magnet_radius=radius))
    double_focus(replace(OPTICS, magnet_radius=0.49))


# --- peak and energy slit ------------------------------------------------------------------------


@pytest.mark.parametrize("half_angle", [5e-3, 10e-3])
@pytest.mark.parametrize("collector", [30e-6, 120e-6])
def test_a_peak_is_the_share_of_rays_that_land_in_the_slit(half_angle: float, collector: float) -> None:
    """Rays by numpy: x = D gamma + M s + C a^2 for uniform s and a; C > 0 puts the tail outward."""
    spec = replace(OPTICS, half_angle=half_angle, collector_slit=collector)
    table = peak_table(spec, double_focus(spec))
    grid = (np.arange(1000) + 0.5) / 1000
    image = (1.5 * 20e-6 * (grid - 0.5))[:, None] + 0.25438 * (half_angle * grid) ** 2
    for offset in np.linspace(-300e-6, 250e-6, 23):
        share = float((np.abs(0.375 * offset + image) < collector / 2).mean())
        assert table.at(float(offset)) == pytest.approx(share, abs=4e-3), offset


@pytest.mark.parametrize("source", [THERMAL, SourceSpec("plasma", energy_fwhm=5.0)])
@pytest.mark.parametrize("slit", [0.1e-3, 0.25e-3, 1e-3])
def test_the_energy_slit_passes_the_share_of_the_distribution(source: SourceSpec, slit: float) -> None:
    """Shares from the cumulative distributions of scipy.stats, averaged over the image of the slit."""
    spec = replace(OPTICS, energy_slit=slit)
    table = energy_table(spec, double_focus(spec), source, NOMINAL)
    law = gamma(2, loc=-2 * KT, scale=KT) if source is THERMAL else norm(0, 5.0 / 2.354820045)
    per_ev = 0.25 / NOMINAL
    spots = 20e-6 / per_ev * ((np.arange(400) + 0.5) / 400 - 0.5)
    half = slit / per_ev / 2
    for offset in (-17.0, -12.0, -4.5, -1.5, -0.5, 0.0, 0.7, 1.6, 4.0, 12.0, 16.5):
        share = float((law.cdf(half - offset + spots) - law.cdf(-half - offset + spots)).mean())
        assert table.at(offset) == pytest.approx(share, abs=3e-3), offset


def test_the_full_width_of_the_thermal_spread() -> None:
    """FWHM 2.446386 kT, here by root finding on scipy.stats.gamma(2), and 0.42163 eV at 2000 K."""
    law = gamma(2)
    low, high = (
        brentq(lambda x: law.pdf(x) - law.pdf(1.0) / 2, *limits) for limits in ((0.01, 1.0), (1.0, 9.0))
    )
    assert high - low == pytest.approx(2.446386, rel=1e-6)
    # a slit far narrower than the spread draws the distribution itself
    spec = replace(OPTICS, energy_slit=1e-7, source_slit=1e-7)
    table = energy_table(spec, double_focus(spec), THERMAL, NOMINAL)
    offsets = np.linspace(-3.0, 1.0, 8001)
    seen = np.array([table.at(float(x)) for x in offsets])
    above = offsets[seen > seen.max() / 2]
    assert above[-1] - above[0] == pytest.approx((high - low) * KT, rel=1e-2)
    assert (high - low) * KT == pytest.approx(0.42163, rel=1e-4)
    # an excess of the mean by 1 kT brings the mode into the slit: mode kT, mean 2 kT
    assert offsets[seen.argmax()] == pytest.approx(KT, abs=0.02)


# --- the beam ------------------------------------------------------------------------------------


@pytest.mark.parametrize("label", [("6Li+", 6, "Li", 1427.92), ("238U+", 238, "U", 36.08)])
def test_the_peak_lies_at_the_relativistic_field(label: tuple[str, int, str, float]) -> None:
    """B^2 r_m^2/(E r_e) = gamma m/q: the apparent mass is high by K/(m c^2). Special relativity."""
    name, number, symbol, ppb = label
    train = beam(name)
    plain = tesla_of(name, number, symbol)
    # flanks lie at m (1 -+ w/2); their fields go with the square root, hence the mean of the masses
    low, high = flanks(train, plain, esa_volts(train), NOMINAL)
    apparent = 0.5 * ((1 / low**2) + (1 / high**2)) * plain**2
    assert (1 / apparent - 1) * 1e9 == pytest.approx(ppb, abs=15.0 if name == "6Li+" else 5.0)


def test_the_esa_voltage_moves_the_peak_and_the_accelerating_voltage_does_not() -> None:
    """m/q = B^2 r_m^2/(E r_e): algebra of the train; 0.1 % of 8 kV is 8 eV, 0.25 mm at the energy slit."""
    train = beam("88Sr+", optics=replace(OPTICS, energy_slit=0.5e-3))
    guess, volts, start = tesla_of("88Sr+", 88, "Sr"), esa_volts(train), NOMINAL - 2 * KT
    rest = centre(train, guess, volts, start)
    high = centre(train, guess, volts * (1 + 100e-6), start)
    assert (high / rest) ** 2 - 1 == pytest.approx(100e-6, abs=1e-9)
    wrong = start * 1.001
    assert centre(train, guess, volts, wrong) == pytest.approx(rest, rel=1e-10)
    # 8 eV put the beam's mean on the edge of a slit of 16 eV: what has less energy than the mean passes,
    # averaged over the image of 20 um, which is as wide as 0.64 eV
    below = float(gamma(2, scale=KT).cdf(2 * KT + np.linspace(-0.32, 0.32, 2001)).mean())
    share = train.rate(0.0, rest, volts, wrong) / train.rate(0.0, rest, volts, start)
    assert share == pytest.approx(below, abs=0.01)
    assert train.rate(0.0, rest, volts, start * 1.003) == 0.0
    # the ESA wrong by as much does both
    both = train.rate(0.0, rest * math.sqrt(1.001), volts * 1.001, start)
    assert both / train.rate(0.0, rest, volts, start) == pytest.approx(1 - below, abs=0.02)
    assert train.rate(0.0, rest, volts * 1.001, start) == 0.0


def test_without_voltage_there_is_no_beam() -> None:
    train = beam("88Sr+")
    tesla, volts = tesla_of("88Sr+", 88, "Sr"), esa_volts(train)
    assert train.rate(0.0, tesla, volts, NOMINAL) == pytest.approx(1e6, rel=1e-9)
    assert train.rate(0.0, tesla, 0.0, NOMINAL) == 0.0
    assert train.rate(0.0, tesla, volts, 0.0) == 0.0


def test_a_peak_has_its_tail_on_the_low_side_and_less_on_the_high() -> None:
    """Scattered ions have lost energy: an exponential tail below the mass (common practice, no source)."""
    train = beam("238U+", optics=replace(OPTICS, tail_one_unit=3e-6))
    volts = esa_volts(train)

    def at_mass(offset: float) -> float:
        apparent = 238.050238356  # 238U+ in u, AME 2020 less an electron
        tesla = tesla_of("238U+", 238, "U") * math.sqrt((apparent + offset) / apparent)
        return train.rate(0.0, tesla, volts, NOMINAL) / 1e6

    assert at_mass(0.0) == pytest.approx(1.0, rel=2e-5)
    # the distance is counted in units of the axis' mass: 1/237 of a unit more or less at one unit
    assert at_mass(-1.0) == pytest.approx(3e-6, rel=6e-3)
    assert at_mass(-2.0) / at_mass(-1.0) == pytest.approx(math.exp(-1 / 0.85), rel=2e-2)
    assert at_mass(1.0) == pytest.approx(0.2 * 3e-6, rel=6e-3)
    assert at_mass(-20.0) == 0.0


def test_the_source_takes_its_mass_bias_drift_and_extraction_from_the_spec() -> None:
    """Exponential fractionation law: the measured ratio times (m_i/m_j)^beta is the true one."""
    source = SourceSpec("thermal", mass_bias=-1.8, drift_per_hour=0.05, extraction_exponent=1.5)
    train = beam("86Sr+", "88Sr+", source=source, rates=(1e5, 8e5))
    masses = 85.909260726, 87.905612256  # AME 2020
    measured = train.source.rates[1] / train.source.rates[0]
    assert measured * (masses[1] / masses[0]) ** -1.8 == pytest.approx(8.0, rel=1e-8)
    assert train.source.level(7200.0) / train.source.level(0.0) == pytest.approx(math.exp(0.1), rel=1e-12)
    tesla, volts = tesla_of("88Sr+", 88, "Sr"), esa_volts(train)
    full = train.rate(0.0, tesla, volts, NOMINAL)
    less = train.rate(0.0, tesla, volts, NOMINAL - 4.0)
    assert less / full == pytest.approx((1 - 4.0 / NOMINAL) ** 1.5, rel=1e-6)
