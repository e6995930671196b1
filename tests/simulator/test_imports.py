"""The simulator stands alone; its tables agree with the controller's and with two other packages."""

from __future__ import annotations

import ast
import csv
from pathlib import Path

import periodictable
import pytest
from mendeleev.fetch import fetch_table
from scipy import constants as codata

from controller.physics import constants as theirs
from simulator import constants as ours
from simulator.species import true_ion

ROOT = Path(__file__).parents[2]
FILES = sorted((ROOT / "simulator").rglob("*.py"))


def imported(path: Path) -> set[str]:
    """Top-level names of all packages that a file imports, at whatever depth of its code."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names.update(alias.name.partition(".")[0] for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            names.add("simulator" if node.level else str(node.module).partition(".")[0])
        elif isinstance(node, ast.Call) and getattr(node.func, "attr", "") == "import_module":
            names.add("import_module")
    return names


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_no_file_of_the_simulator_imports_the_controller_or_the_drivers(path: Path) -> None:
    assert len(FILES) > 10
    assert not imported(path) & {"controller", "drivers", "import_module", "asyncio", "random", "time"}


def table(package: str) -> dict[tuple[str, int], float]:
    path = next((ROOT / package).rglob("nuclides.csv"))
    lines = [line for line in path.read_text(encoding="utf-8").splitlines() if not line.startswith("#")]
    return {(row["symbol"], int(row["mass_number"])): float(row["mass_u"]) for row in csv.DictReader(lines)}


def test_masses_agree_between_both_tables_and_both_packages() -> None:
    """mendeleev and periodictable, two independent compilations; 1e-6 of the mass."""
    simulated, controlled = table("simulator"), table("controller")
    # written apart: one has a rare isomer, the other two tracers, and nothing else differs
    assert set(simulated) ^ set(controlled) <= {("Ta", 180), ("Pu", 242), ("Pu", 244)}
    assert len(simulated) > 250
    isotopes = fetch_table("isotopes")
    known = {
        (periodictable.elements[int(z)].symbol, int(number)): float(mass)
        for z, number, mass in zip(
            isotopes["atomic_number"], isotopes["mass_number"], isotopes["mass"], strict=True
        )
    }
    for (symbol, number), mass in simulated.items():
        assert mass == pytest.approx(getattr(periodictable, symbol)[number].mass, rel=1e-6), (symbol, number)
        assert mass == pytest.approx(known[symbol, number], rel=1e-6), (symbol, number)
        assert mass == pytest.approx(controlled.get((symbol, number), mass), rel=1e-6), (symbol, number)
        assert abs(mass - number) < 0.12, (symbol, number)  # no mass stands in another's line
    for (symbol, number), mass in controlled.items():
        assert mass == pytest.approx(known[symbol, number], rel=1e-6), (symbol, number)


@pytest.mark.parametrize(
    ("name", "simulated", "controlled"),
    [
        ("elementary charge", ours.E_CHARGE, theirs.ELEMENTARY_CHARGE),
        ("atomic mass constant", ours.U_KG, theirs.ATOMIC_MASS),
        ("electron mass in u", ours.M_E_U, theirs.ELECTRON_MASS_U),
        ("speed of light in vacuum", ours.C_LIGHT, theirs.LIGHT_SPEED),
        ("Boltzmann constant", ours.K_B, theirs.BOLTZMANN),
        ("Boltzmann constant in eV/K", ours.EV_PER_KELVIN, theirs.BOLTZMANN / theirs.ELEMENTARY_CHARGE),
    ],
)
def test_constants_are_those_of_codata(name: str, simulated: float, controlled: float) -> None:
    """CODATA 2022 via scipy.constants."""
    assert simulated == pytest.approx(codata.value(name), rel=2e-9)
    assert controlled == pytest.approx(codata.value(name), rel=2e-9)


def test_an_ion_has_lost_its_electrons() -> None:
    """Masses by periodictable; the electron's by scipy.constants."""
    electron = codata.value("electron mass in u")
    lead = periodictable.Pb[208].mass
    twice = true_ion("208Pb++")
    assert twice.charge == 2
    assert twice.kg / codata.value("atomic mass constant") == pytest.approx(lead - 2 * electron, rel=1e-9)
    assert twice.kg_per_coulomb == pytest.approx(twice.kg / (2 * codata.e), rel=1e-12)
    oxide = true_ion("238U16O_2+")
    assert oxide.neutral_u == pytest.approx(
        periodictable.U[238].mass + 2 * periodictable.O[16].mass, rel=1e-9
    )
    with pytest.raises(KeyError):
        true_ion("999Pb+")
