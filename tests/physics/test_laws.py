"""The controller's laws against CODATA, handbook arithmetic and registry packages."""

from __future__ import annotations

import math

import mendeleev
import numpy as np
import periodictable
import pytest
from scipy import constants as codata

from controller.config.instrument import Geometry
from controller.config.load import load_instrument
from controller.physics import constants as ours
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
from simulator import constants as theirs
from simulator.species import true_ion

BENCH = "configs/bench/instrument.toml"


def geometry() -> Geometry:
    return load_instrument(BENCH).settings.geometry


def test_constants_are_those_of_codata_on_both_sides() -> None:
    """CODATA 2022 through scipy.constants; the two sides are written apart."""
    for value, name in (
        (ours.ELEMENTARY_CHARGE, "elementary charge"),
        (ours.ATOMIC_MASS, "atomic mass constant"),
        (ours.LIGHT_SPEED, "speed of light in vacuum"),
        (ours.BOLTZMANN, "Boltzmann constant"),
        (ours.ELECTRON_MASS_U, "electron mass in u"),
        (theirs.E_CHARGE, "elementary charge"),
        (theirs.U_KG, "atomic mass constant"),
        (theirs.C_LIGHT, "speed of light in vacuum"),
        (theirs.K_B, "Boltzmann constant"),
        (theirs.M_E_U, "electron mass in u"),
    ):
        assert value == pytest.approx(codata.value(name), rel=2e-9), name


def test_the_handbook_constant_of_the_magnetic_radius() -> None:
    """r/cm = 143.974 sqrt(m/z V)/B: sqrt(2u/e) of CODATA 2022, not the obsolete 143.95."""
    constant = math.sqrt(2 * codata.value("atomic mass constant") / codata.e) * 1e6
    assert constant == pytest.approx(143.97409258, rel=2e-9)
    one_u = field_tesla(ours.ATOMIC_MASS, 1, 1.0, 0.01)  # a mass of 1 u at 1 V and a radius of 1 cm
    assert one_u * 1e4 == pytest.approx(constant, rel=1e-8)


@pytest.mark.parametrize(
    ("label", "element", "number", "charge", "tesla"),
    [
        ("238U+", "U", 238, 1, 0.6622811574),
        ("88Sr+", "Sr", 88, 1, 0.4024528759),
        ("208Pb++", "Pb", 208, 2, 0.4377228687),
    ],
)
def test_fields_at_8_kv_and_30_cm(label: str, element: str, number: int, charge: int, tesla: float) -> None:
    """From mendeleev's mass and scipy's constants; the exact law lies parts in 1e8 above the plain one."""
    atom = mendeleev.isotope(element, number).mass
    kg = (atom - charge * codata.value("electron mass in u")) * codata.value("atomic mass constant")
    plain = math.sqrt(2 * kg * 8000.0 / (charge * codata.e)) / 0.30
    assert plain == pytest.approx(tesla, rel=1e-8)
    ion = parse_ion(label)
    exact = field_tesla(ion.mass_kg, ion.charge, 8000.0, 0.30)
    shift = charge * codata.e * 8000.0 / (4 * kg * codata.c**2)
    assert exact / plain - 1 == pytest.approx(shift, abs=2e-9)


def test_the_relativistic_shift_of_lithium() -> None:
    """K/2mc^2 in mass: +714.0 ppb for 6Li+ at 8 kV; elementary algebra of special relativity."""
    ion = parse_ion("6Li+")
    tesla = field_tesla(ion.mass_kg, 1, 8000.0, 0.30)
    plain = (tesla * 0.30) ** 2 / (2 * 8000.0) * codata.e / codata.value("atomic mass constant")
    assert (plain / ion.mass_u - 1) * 1e9 == pytest.approx(714.0, abs=0.2)
    assert mass_to_charge(tesla, 8000.0, 0.30) == pytest.approx(ion.mass_u, rel=2e-9)


def test_esa_volts_against_a_finite_difference_laplace_solution() -> None:
    """The radial Laplace equation on 4001 points between the plates, solved here with numpy."""
    shape = geometry()
    r_e, gap = shape.esa_radius, shape.esa_gap
    inner = -gap / 2 + math.sqrt(r_e**2 + gap**2 / 4)  # r1 r2 = r_e^2, r2 - r1 = gap
    r = np.linspace(inner, inner + gap, 4001)
    h = r[1] - r[0]
    volts = esa_volts(8000.0, shape, source_offset=0.0, trim=0.0)
    lower = 1 - h / (2 * r[1:-1])
    upper = 1 + h / (2 * r[1:-1])
    from scipy.linalg import solve_banded

    n = len(r) - 2
    bands = np.zeros((3, n))
    bands[1] = -2.0
    bands[0, 1:], bands[2, :-1] = upper[:-1], lower[1:]
    right = np.zeros(n)
    right[-1] = -upper[-1] * volts
    potential = np.concatenate([[0.0], solve_banded((1, 1), bands, right), [volts]])
    field = np.interp(r_e, r, np.gradient(potential, h))
    assert field == pytest.approx(2 * 8000.0 / r_e, rel=1e-6)  # q E r = 2 K on the axis
    assert volts == pytest.approx(959.856058, rel=1e-8)
    assert tracking_ratio(shape) == pytest.approx(0.1199820073, rel=1e-9)


def test_a_voltage_jump_keeps_mass_times_voltage() -> None:
    """205Tl to 208Pb from 8 kV: 7884.517 V by hand from the two ion masses."""
    thallium, lead = parse_ion("205Tl+").mass_to_charge, parse_ion("208Pb+").mass_to_charge
    assert jump_volts(8000.0, thallium, lead, 0.0) == pytest.approx(7884.51655, rel=1e-8)
    with_offset = jump_volts(8000.0, thallium, lead, 3.0)
    assert (with_offset + 3.0) * lead == pytest.approx(8003.0 * thallium, rel=1e-12)


def test_masses_agree_three_ways() -> None:
    """The controller's table (mendeleev, AME 2020), the simulator's (periodictable), and both packages."""
    for label, symbol, number in (
        ("87Rb+", "Rb", 87),
        ("88Sr+", "Sr", 88),
        ("204Pb+", "Pb", 204),
        ("238U+", "U", 238),
    ):
        ion = parse_ion(label)
        assert ion.mass_kg == pytest.approx(true_ion(label).kg, rel=5e-8)
        assert ion.neutral_u == pytest.approx(mendeleev.isotope(symbol, number).mass, rel=1e-10)
        assert ion.neutral_u == pytest.approx(getattr(periodictable, symbol)[number].mass, rel=5e-8)
    both = parse_ion("238U16O+")
    assert both.mass_kg == pytest.approx(true_ion("238U16O+").kg, rel=1e-9)
    assert both.mass_u == pytest.approx(254.045152975, rel=1e-9)


@pytest.mark.parametrize(
    ("element", "ratios", "weight"),
    [
        # certified ratios of SRM 981 to 206Pb and of SRM 987 to 88Sr, from memory
        ("Pb", {204: 0.059042, 206: 1.0, 207: 0.91464, 208: 2.1681}, 207.21517),
        ("Sr", {84: 0.05655 * 0.11935, 86: 0.11935, 87: 0.71034 * 0.11935, 88: 1.0}, 87.616804),
    ],
)
def test_atomic_weights_of_reference_materials(element: str, ratios: dict[int, float], weight: float) -> None:
    """Atomic weights of the certificates (from memory) from their ratios and our masses."""
    whole = sum(ratios.values())
    mean = sum(share * nuclides()[element, number].mass_u for number, share in ratios.items()) / whole
    assert mean == pytest.approx(weight, rel=1e-6)


def test_the_isobars_of_strontium_cannot_be_resolved() -> None:
    """87Rb and 87Sr differ by one part in 286 795 (two packages): correction, never resolution."""
    rb, sr = nuclides()["Rb", 87].mass_u, nuclides()["Sr", 87].mass_u
    assert min(rb, sr) / abs(rb - sr) == pytest.approx(286795.4, rel=1e-3)


@pytest.mark.parametrize(
    "label", ["Pb", "208pb+", "208Pb", "208Pb-", "+", "208Pb+++++", "999Pb+", "208 Pb+", ""]
)
def test_what_is_no_ion_is_said(label: str) -> None:
    with pytest.raises(ValueError, match=r"not an ion label|not in the table"):
        parse_ion(label)


def test_the_field_law_goes_there_and_back_and_refuses_outside() -> None:
    model = MagnetModel(load_instrument(BENCH).settings.magnet)
    for tesla in (0.05, 0.4, 0.9):
        assert model.tesla_for_amps(model.amps_for_tesla(tesla)) == pytest.approx(tesla, rel=1e-12)
    slope = (model.tesla_for_amps(5.001) - model.tesla_for_amps(4.999)) / 0.002
    assert model.tesla_per_amp(5.0) == pytest.approx(slope, rel=1e-6)
    for tesla in (0.01, 0.95):
        with pytest.raises(OutsideRange):
            model.amps_for_tesla(tesla)


def test_peak_widths_of_the_bench() -> None:
    """Slits 20 and 120 um, dispersion 0.375 m, magnification 1.5: textbook sector optics."""
    widths = peak_widths(geometry())
    found = [round(1e6 * w, 3) for w in (widths.base, widths.flat_top, widths.half_height, widths.edge)]
    assert found == [400.0, 240.0, 320.0, 80.0]
    assert widths.energy_window == pytest.approx(0.004)
