"""The pinned table of nuclides (``nuclides.csv``: source and version in its head)."""

from __future__ import annotations

import csv
from functools import cache
from importlib.resources import files
from typing import NamedTuple


class Nuclide(NamedTuple):
    """Mass and its standard uncertainty in u, representative abundance as a fraction (0: none)."""

    symbol: str
    mass_number: int
    mass_u: float
    mass_uncertainty_u: float
    abundance: float


@cache
def nuclides() -> dict[tuple[str, int], Nuclide]:
    """The table by (symbol, mass number)."""
    text = (files("controller.physics") / "nuclides.csv").read_text(encoding="utf-8")
    rows = csv.reader(line for line in text.splitlines() if not line.startswith("#"))
    next(rows)
    return {
        (symbol, int(number)): Nuclide(symbol, int(number), float(mass), float(u), float(percent) / 100)
        for symbol, number, mass, u, percent in rows
    }
