"""The laws over their whole range, against decimals, a numerical convolution and a Laplace solution."""

from __future__ import annotations

import math
from decimal import Decimal, getcontext

import numpy as np
import periodictable
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mendeleev import isotope
from scipy import constants as codata
from scipy.linalg import solve_banded

from controller.config.instrument import Geometry, MagnetSettings
from controller.config.load import load_instrument
from controller.physics.fields import (
    esa_volts,
    field_tesla,
    jump_volts,
    mass_to_charge,
    tracking_ratio,
)
from controller.physics.ions import parse_ion
from controller.physics.magnet_model import MagnetModel, OutsideRange
from controller.physics.nuclides import nuclides
from controller.physics.peak import peak_widths

BENCH = "configs/bench/instrument.toml"
EXAMPLES = settings(max_examples=100, deadline=None, derandomize=True)


def geometry(**changed: float) -> Geometry:
    return load_instrument(BENCH).settings.geometry.model_copy(update=changed)


def magnet(**changed: float) -> MagnetSettings:
    return load_instrument(BENCH).settings.magnet.model_copy(update=changed)


def decimal_field(mass_u: Decimal, charge: int, volts: float, radius: float, *, exact: bool) -> float:
    """p = sqrt(2 m K (1 + K / 2 m c^2)), B = p / q r, in thirty digits with scipy's CODATA."""
    getcontext().prec = 30
    e, c = Decimal(str(codata.e)), Decimal(str(codata.c))
    kg = (mass_u - charge * Decimal(str(codata.value("electron mass in u")))) * Decimal(
        str(codata.value("atomic mass constant"))
    )
    energy = charge * e * Decimal(str(volts))
    factor = 1 + energy / (2 * kg * c * c) if exact else Decimal(1)
    return float((2 * kg * energy * factor).sqrt() / (charge * e * Decimal(str(radius))))


@pytest.mark.parametrize(
    ("label", "symbol", "number", "charge", "tesla"),
    [
        ("238U+", "U", 238, 1, 0.6622811574),
        ("88Sr+", "Sr", 88, 1, 0.4024528759),
        ("208Pb++", "Pb", 208, 2, 0.4377228687),
    ],
)
def test_fields_against_decimals(label: str, symbol: str, number: int, charge: int, tesla: float) -> None:
    """Masses of mendeleev, constants of scipy. The tabulated fields leave relativity out (9 to 24 ppb)."""
    mass = Decimal(str(isotope(symbol, number).mass))
    assert decimal_field(mass, charge, 8000.0, 0.30, exact=False) == pytest.approx(tesla, rel=1e-9)
    ion = parse_ion(label)
    expected = decimal_field(mass, charge, 8000.0, 0.30, exact=True)
    # an older scipy carries CODATA 2018, whose atomic mass constant is 1.4e-9 smaller
    assert field_tesla(ion.mass_kg, ion.charge, 8000.0, 0.30) == pytest.approx(expected, rel=1.5e-9)


@EXAMPLES
@given(
    st.sampled_from(["6Li+", "40Ar+", "88Sr+", "208Pb++", "238U16O+", "238U+++"]),
    st.floats(500.0, 20_000.0),
    st.floats(0.05, 1.0),
)
def test_field_and_mass_are_inverse(label: str, volts: float, radius: float) -> None:
    ion = parse_ion(label)
    tesla = field_tesla(ion.mass_kg, ion.charge, volts, radius)
    assert mass_to_charge(tesla, volts, radius) == pytest.approx(ion.mass_to_charge, rel=1e-12)


def test_the_obsolete_handbook_constant_is_not_met() -> None:
    """143.95 belongs to the mass scale of before 1961, m(16O)/16 = 1; masses from periodictable."""
    one_u = field_tesla(codata.value("atomic mass constant"), 1, 1.0, 0.01) * 1e4
    assert one_u == pytest.approx(143.97409258, rel=2e-9)
    assert one_u * math.sqrt(periodictable.O[16].mass / 16) == pytest.approx(143.95121, rel=1e-6)


@pytest.mark.parametrize(("gap", "radius"), [(0.015, 0.25), (0.002, 0.25), (0.04, 0.2)])
def test_esa_volts_bend_the_axial_ion_whatever_the_plates(gap: float, radius: float) -> None:
    """q E r = 2 K on the axis and no potential there: (r phi')' = 0 in finite differences on 4001 points."""
    shape = geometry(esa_gap=gap, esa_radius=radius)
    volts = esa_volts(8000.0, shape, source_offset=2.0, trim=0.0)
    inner = (math.sqrt(gap**2 + 4 * radius**2) - gap) / 2  # r1 (r1 + gap) = radius^2
    r = np.linspace(inner, inner + gap, 4001)
    half = (r[1:] + r[:-1]) / 2  # conservative form: half-way radii carry the flux
    bands = np.zeros((3, 3999))
    bands[1], bands[0, 1:], bands[2, :-1] = -(half[1:] + half[:-1]), half[1:-1], half[1:-1]
    right = np.zeros(3999)
    right[0], right[-1] = half[0] * volts / 2, -half[-1] * volts / 2  # balanced drive: -U/2 and +U/2
    phi = np.concatenate([[-volts / 2], solve_banded((1, 1), bands, right), [volts / 2]])
    field = np.interp(radius, half, np.diff(phi) / np.diff(r))
    assert field == pytest.approx(2 * 8002.0 / radius, rel=1e-6)
    assert abs(np.interp(radius, r, phi)) < 1e-6 * volts
    trimmed = esa_volts(8000.0, shape, source_offset=2.0, trim=1e-3)
    assert trimmed == pytest.approx(1.001 * volts, rel=1e-12)


def test_the_tracking_ratio_is_the_logarithm_of_the_radii() -> None:
    """2 ln(r2/r1) of the geometric plates 242.612475 and 257.612475 mm: 959.856 V at 8 kV."""
    assert tracking_ratio(geometry()) == pytest.approx(2 * math.log(257.612475 / 242.612475), rel=1e-7)
    assert tracking_ratio(geometry()) == pytest.approx(0.1199820073, rel=1e-9)
    volts = esa_volts(8000.0, geometry(), source_offset=0.0, trim=0.0)
    assert volts == pytest.approx(959.856058, rel=1e-8)


@EXAMPLES
@given(st.floats(5.0, 300.0), st.floats(0.8, 1.2), st.floats(-50.0, 50.0))
def test_jumps_there_and_back_end_where_they_began(mass: float, ratio: float, offset: float) -> None:
    there = jump_volts(8000.0, mass, mass * ratio, offset)
    assert (there + offset) * ratio == pytest.approx(8000.0 + offset, rel=1e-12)
    assert jump_volts(there, mass * ratio, mass, offset) == pytest.approx(8000.0, rel=1e-12)


@pytest.mark.parametrize(
    ("slits", "ppm"),
    [
        ((20e-6, 120e-6), (400.0, 240.0, 320.0, 80.0)),
        ((100e-6, 60e-6), (560.0, 240.0, 400.0, 160.0)),  # the image, 150 um, is the wider one
    ],
)
def test_peak_widths_against_a_numerical_convolution(
    slits: tuple[float, float], ppm: tuple[float, float, float, float]
) -> None:
    """Two boxes convolved with numpy; magnification 1.5 and dispersion 0.375 m by matrix optics."""
    shape = geometry(source_slit=slits[0], collector_slit=slits[1])
    widths = peak_widths(shape)
    found = (widths.base, widths.flat_top, widths.half_height, widths.edge)
    assert [1e6 * w for w in found] == pytest.approx(ppm, rel=1e-9)
    step = 1e-7
    x = np.arange(-400e-6, 400e-6, step) + step / 2
    image, slit = (np.abs(x) < 1.5 * slits[0] / 2), (np.abs(x) < slits[1] / 2)
    peak = np.convolve(image.astype(float), slit.astype(float)) / min(image.sum(), slit.sum())
    seen = [np.count_nonzero(peak > level) * step / 0.375 for level in (1e-9, 1 - 1e-9, 0.5)]
    assert [1e6 * w for w in seen] == pytest.approx(ppm[:3], abs=1.0)


def test_a_geometry_that_cannot_focus_is_refused() -> None:
    with pytest.raises(ValueError, match=r"no double focus: magnet radius 0\.5 m is not below twice"):
        peak_widths(geometry(magnet_radius=0.5))


def test_isobars_need_the_resolving_power_of_two_packages() -> None:
    """87Rb and 87Sr, mass of the lighter over the difference: 286 795."""
    rb, sr = nuclides()["Rb", 87].mass_u, nuclides()["Sr", 87].mass_u
    ours = sr / (rb - sr)
    assert ours == pytest.approx(286795.4, rel=1e-6)
    named = isotope("Sr", 87).mass / (isotope("Rb", 87).mass - isotope("Sr", 87).mass)
    assert ours == pytest.approx(named, rel=1e-6)
    table = periodictable.Sr[87].mass / (periodictable.Rb[87].mass - periodictable.Sr[87].mass)
    assert ours == pytest.approx(table, rel=1e-4)  # eight decimals there


def test_abundances_of_the_reference_materials_follow_from_their_ratios() -> None:
    """Certified ratios and abundances of SRM 981 and SRM 987, both from memory; masses ours."""
    for element, ratios, percent, weight in (
        (
            "Pb",
            {204: 0.059042, 206: 1.0, 207: 0.91464, 208: 2.1681},
            (1.4255, 24.1442, 22.0833, 52.3470),
            207.215169,
        ),
        (
            "Sr",
            {84: 0.05655 * 0.11935, 86: 0.11935, 87: 0.71034 * 0.11935, 88: 1.0},
            (0.5574, 9.8565, 7.0015, 82.5847),
            87.616804,
        ),
    ):
        whole = math.fsum(ratios.values())
        assert [100 * r / whole for r in ratios.values()] == pytest.approx(percent, abs=6e-5)
        masses = [nuclides()[element, number].mass_u for number in ratios]
        mean = math.fsum(r * m for r, m in zip(ratios.values(), masses, strict=True)) / whole
        assert mean == pytest.approx(weight, rel=1e-8)


@pytest.mark.parametrize(
    ("label", "near"),
    [("94Sr+", "84Sr"), ("238V+", "238U"), ("209Pb+", "208Pb"), ("16O206Bp+", "206Pb")],
)
def test_an_unknown_nuclide_has_a_suggestion(label: str, near: str) -> None:
    with pytest.raises(ValueError, match=rf"is not in the table of nuclides; nearest known: .*\b{near}\b"):
        parse_ion(label)


def test_the_field_law_over_its_range_and_outside() -> None:
    model = MagnetModel(magnet())
    amps = [model.amps_for_tesla(tesla) for tesla in np.linspace(0.05, 0.9, 60).tolist()]
    assert amps == sorted(amps)
    for current in (0.0, 1.0, 5.0, 10.5):
        tesla = model.tesla_for_amps(current)
        assert tesla == pytest.approx(4.0 * float(np.tanh(0.0915666 * current / 4.0)), rel=1e-12)
    for current in (-0.001, 10.501):
        with pytest.raises(OutsideRange, match=r"is outside 0 to 10\.5 A"):
            model.tesla_for_amps(current)
    for tesla in (0.0499, 0.9001, math.nan):
        with pytest.raises(OutsideRange, match=r"outside 0\.05 to 0\.9 T"):
            model.amps_for_tesla(tesla)
    with pytest.raises(OutsideRange, match=r"needs .* A, more than 8 A"):
        MagnetModel(magnet(amps_max=8.0)).amps_for_tesla(0.9)


def test_the_abundances_of_the_demo_elements_are_those_of_mendeleev() -> None:
    """Fractions here, percent there."""
    for symbol, number in (("Sr", 88), ("Rb", 85), ("Hg", 202), ("Tl", 205), ("Th", 232), ("U", 235)):
        expected = isotope(symbol, number).abundance / 100
        assert nuclides()[symbol, number].abundance == pytest.approx(expected, rel=1e-9)
        assert nuclides()[symbol, number].mass_uncertainty_u == pytest.approx(
            isotope(symbol, number).mass_uncertainty, rel=1e-6
        )
