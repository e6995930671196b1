"""The exponential law and isobars on exact data."""

from __future__ import annotations

import math

import pytest
from reduce_samples import MASSES

from controller.reduce.interference import Isobar, resolve
from controller.reduce.massbias import Normaliser, corrected, exponent, fractionated

M84, M86, M87, M88 = (MASSES[f"{a}Sr+"] for a in (84, 86, 87, 88))
NORMALISER = Normaliser("86Sr+", "88Sr+", 0.1194, M86, M88)


def test_strontium_example():
    # worked by hand in logarithms with the AME2020 masses
    beta = exponent(0.1185, 0.1194, M86, M88)
    assert beta == pytest.approx(-0.329367664, rel=1e-8)
    assert corrected(0.7145, M87, M86, beta) == pytest.approx(0.7117827155, rel=1e-9)
    assert corrected(0.0560, M84, M86, beta) == pytest.approx(0.056435243, rel=1e-8)


def test_ion_masses_change_nothing_that_matters():
    electron = 5.485799090441e-4  # u, CODATA 2022
    beta = exponent(0.1185, 0.1194, M86 - electron, M88 - electron)
    with_ions = corrected(0.7145, M87 - electron, M86 - electron, beta)
    assert with_ions == pytest.approx(0.7117827155, rel=3e-9)


def test_there_and_back():
    measured_87, measured_86 = fractionated(0.71034, M87, M86, -1.8), fractionated(0.1194, M86, M88, -1.8)
    assert measured_87 == pytest.approx(0.725286772, rel=1e-9)
    assert measured_86 == pytest.approx(0.114563536, rel=1e-8)
    assert corrected(measured_87, M87, M86, exponent(measured_86, 0.1194, M86, M88)) == pytest.approx(
        0.71034, rel=1e-14
    )


def test_no_exponent_without_positive_ratios():
    for measured in (0.0, -0.1):
        assert math.isnan(exponent(measured, 0.1194, M86, M88))


def _measured(beta: float, rubidium: float) -> dict[str, float]:
    """Intensities as an instrument with this bias would give them, relative to mass 88."""

    def seen(amount: float, mass: float) -> float:
        return amount * (mass / M88) ** -beta

    return {
        "86Sr+": seen(0.1194, M86),
        "87Sr+": seen(0.71034 * 0.1194, M87) + seen(0.3856 * rubidium, MASSES["87Rb+"]),
        "88Sr+": 1.0,
        "85Rb+": seen(rubidium, MASSES["85Rb+"]),
    }


RUBIDIUM = Isobar("87Sr+", "85Rb+", 0.3856, MASSES["87Rb+"], MASSES["85Rb+"])


@pytest.mark.parametrize(("beta", "rubidium"), [(-1.8, 1e-3), (-1.8, 0.1), (2.5, 1e-5), (0.0, 0.02)])
def test_isobar_and_mass_bias_together(beta, rubidium):
    found = resolve(_measured(beta, rubidium), [RUBIDIUM], NORMALISER)
    assert found.beta == pytest.approx(beta, abs=1e-11)
    raw = found.intensities["87Sr+"] / found.intensities["86Sr+"]
    assert corrected(raw, M87, M86, found.beta) == pytest.approx(0.71034, rel=1e-12)
    assert found.passes <= 4


def test_an_isobar_on_the_normalising_ion_needs_the_fixed_point():
    """Krypton on 86Sr: the exponent comes from the very intensity that it helps to correct."""
    krypton_86, krypton_83 = 85.9106106, 82.9141272  # u, AME2020
    measured = _measured(-1.8, 0.0)
    monitor = 0.02 * (krypton_83 / M88) ** 1.8
    measured["83Kr+"] = monitor
    measured["86Sr+"] += 1.505 * 0.02 * (krypton_86 / M88) ** 1.8
    isobar = Isobar("86Sr+", "83Kr+", 1.505, krypton_86, krypton_83)
    one_pass = measured["86Sr+"] - 1.505 * monitor
    assert abs(one_pass / (0.1194 * (M86 / M88) ** 1.8) - 1) > 1e-2  # a single plain pass is off by per cents
    found = resolve(measured, [isobar], NORMALISER)
    assert found.beta == pytest.approx(-1.8, abs=1e-9)
    assert found.passes > 4


def test_a_monitor_with_an_isobar_of_its_own():
    measured = {"A": 10.0 + 0.5 * 4.0, "B": 4.0 + 0.25 * 2.0, "C": 2.0}
    chain = [Isobar("A", "B", 0.5, 100.0, 101.0), Isobar("B", "C", 0.25, 101.0, 102.0)]
    found = resolve(measured, chain, None)
    assert found.intensities == pytest.approx({"A": 10.0, "B": 4.0, "C": 2.0}, rel=1e-12)
    assert found.beta == 0.0


def test_an_isobar_larger_than_its_ion_is_undefined_not_invented():
    measured = {**_measured(-1.8, 1e-3), "86Sr+": -0.01}
    assert math.isnan(resolve(measured, [RUBIDIUM], NORMALISER).beta)
