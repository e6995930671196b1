"""True masses of the simulated ions: the atoms' masses less the electrons that are missing."""

from __future__ import annotations

import csv
import re
from functools import cache
from importlib.resources import files
from typing import NamedTuple

from simulator.constants import E_CHARGE, M_E_U, U_KG


class TrueIon(NamedTuple):
    label: str
    kg: float
    charge: int
    neutral_u: float

    @property
    def kg_per_coulomb(self) -> float:
        return self.kg / (self.charge * E_CHARGE)


@cache
def _masses() -> dict[str, float]:
    text = (files("simulator") / "nuclides.csv").read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    return {row["mass_number"] + row["symbol"]: float(row["mass_u"]) for row in csv.DictReader(lines)}


def true_ion(label: str) -> TrueIon:
    """The ion of a label such as 208Pb+ or 238U16O+. Raises KeyError for an unknown nuclide."""
    body, plus = label.rstrip("+"), label.count("+")
    atoms = re.findall(r"(\d+[A-Z][a-z]?)(?:_(\d+))?", body)
    neutral = sum(_masses()[atom] * int(count or 1) for atom, count in atoms)
    return TrueIon(label, (neutral - plus * M_E_U) * U_KG, plus, neutral)
