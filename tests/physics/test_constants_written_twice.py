"""What controller and simulator each wrote down, against one another and against third sources.

A wrong constant shared by both sides would cancel in every closed loop. So neither reads the other's
file (their imports are tested elsewhere), and here both are compared with packages that neither uses.
"""

from __future__ import annotations

import math

import periodictable
import pytest
from mendeleev.fetch import fetch_table
from scipy import constants as codata

from controller.physics import constants as ours
from controller.physics.ions import parse_ion
from controller.physics.nuclides import nuclides
from simulator import constants as theirs
from simulator.species import true_ion

# (controller, simulator, scipy's name of the CODATA value, relative tolerance); exact ones allow nothing.
# An older scipy carries CODATA 2018, whose atomic mass constant is 1.4e-9 smaller.
PAIRS = [
    (ours.ELEMENTARY_CHARGE, theirs.E_CHARGE, "elementary charge", 0.0),
    (ours.LIGHT_SPEED, theirs.C_LIGHT, "speed of light in vacuum", 0.0),
    (ours.BOLTZMANN, theirs.K_B, "Boltzmann constant", 0.0),
    (ours.ATOMIC_MASS, theirs.U_KG, "atomic mass constant", 2e-9),
    (ours.ELECTRON_MASS_U, theirs.M_E_U, "electron mass in u", 2e-9),
]


@pytest.mark.parametrize(("here", "there", "name", "tolerance"), PAIRS)
def test_each_constant_is_written_alike_on_both_sides_and_in_codata(
    here: float, there: float, name: str, tolerance: float
) -> None:
    assert here == there
    assert here == pytest.approx(codata.value(name), rel=tolerance, abs=0.0)


TRACERS_OF_THE_CONTROLLER = {"242Pu", "244Pu"}  # which no simulated sample may hold


def test_every_mass_agrees_with_the_simulators_and_with_both_packages() -> None:
    """AME 2020 through mendeleev; periodictable rounds heavy masses to seven decimals (3.2e-9 at most)."""
    isotopes = fetch_table("isotopes")
    symbols = fetch_table("elements").set_index("atomic_number")["symbol"]
    columns = (isotopes["atomic_number"], isotopes["mass_number"], isotopes["mass"])
    ame = {(symbols[z], int(number)): float(mass) for z, number, mass in zip(*columns, strict=True)}
    table = nuclides()
    assert len(table) > 290
    for (symbol, number), nuclide in table.items():
        label = f"{number}{symbol}"
        assert nuclide.mass_u == pytest.approx(ame[symbol, number], rel=1e-11), label
        other = getattr(periodictable, symbol)[number].mass
        assert nuclide.mass_u == pytest.approx(other, rel=5e-9), label
        if label not in TRACERS_OF_THE_CONTROLLER:
            here, there = parse_ion(f"{label}+"), true_ion(f"{label}+")
            assert here.mass_kg == pytest.approx(there.kg, rel=5e-9), label


def test_every_element_of_the_table_is_whole() -> None:
    """Representative abundances of an element with stable isotopes add up to one (IUPAC's rounding)."""
    sums: dict[str, float] = {}
    for nuclide in nuclides().values():
        sums[nuclide.symbol] = sums.get(nuclide.symbol, 0.0) + nuclide.abundance
    whole = [symbol for symbol, total in sums.items() if total > 0]
    assert len(whole) > 80
    for symbol in whole:
        assert sums[symbol] == pytest.approx(1.0, abs=3e-4), symbol


def test_abundances_and_masses_give_the_atomic_weights() -> None:
    """Atomic weights as mendeleev tabulates them; some vary in nature by more than they are certain."""
    weights = fetch_table("elements").set_index("symbol")["atomic_weight"]
    for symbol in ("Sr", "Rb", "Pb", "Tl", "Hg", "Nd", "U", "O", "Xe", "Fe", "Zr"):
        rows = [n for n in nuclides().values() if n.symbol == symbol]
        mean = math.fsum(n.abundance * n.mass_u for n in rows) / math.fsum(n.abundance for n in rows)
        assert mean == pytest.approx(float(weights[symbol]), rel=1e-4), symbol


@pytest.mark.parametrize("label", ["238U16O+", "208Pb++", "40Ar_2+", "12C16O_2+", "16O1H_3+", "4He_12+"])
def test_labels_are_read_alike_on_both_sides(label: str) -> None:
    here, there = parse_ion(label), true_ion(label)
    assert (here.charge, here.label) == (there.charge, there.label)
    assert here.mass_kg == pytest.approx(there.kg, rel=1e-8)
    assert here.neutral_u == pytest.approx(there.neutral_u, rel=1e-8)


@pytest.mark.parametrize(
    ("label", "parts", "charge"),
    [
        ("238U16O+", {("U", 238): 1, ("O", 16): 1}, 1),
        ("16O1H_3+", {("O", 16): 1, ("H", 1): 3}, 1),
        ("4He_12++", {("He", 4): 12}, 2),
    ],
)
def test_a_molecules_mass_is_the_sum_of_its_atoms(
    label: str, parts: dict[tuple[str, int], int], charge: int
) -> None:
    """Masses from periodictable."""
    whole = sum(getattr(periodictable, symbol)[n].mass * count for (symbol, n), count in parts.items())
    assert parse_ion(label).neutral_u == pytest.approx(whole, rel=1e-8)
    assert parse_ion(label).charge == charge


@pytest.mark.parametrize("label", ["1H_316O+", "40Ar_0+", "40Ar_+", "40Ar_100+", "\u0664\u0660Ar+"])
def test_a_count_that_could_be_misread_is_refused(label: str) -> None:
    """H3 16O or H31 6O, or even 316 H: a count stands last."""
    with pytest.raises(ValueError, match="is not an ion label"):
        parse_ion(label)


def test_an_ion_is_the_atom_less_its_electrons() -> None:
    """Masses from periodictable, electron mass from CODATA: 2.64 ppm for lead, twice that for Pb++."""
    atom = periodictable.Pb[208].mass
    for charge in (1, 2, 3, 4):
        ion = parse_ion("208Pb" + "+" * charge)
        expected = (atom - charge * codata.value("electron mass in u")) / charge
        assert ion.mass_to_charge == pytest.approx(expected, rel=1e-8)
        assert ion.mass_kg == pytest.approx(
            (atom - charge * codata.value("electron mass in u")) * codata.value("atomic mass constant"),
            rel=1e-8,
        )
