"""Ions by label: "208Pb+", "238U16O+", "208Pb++", "40Ar_2+", "16O1H_3+".

A count follows an underscore and stands last: in "1H_316O+" nobody could tell where it ends.
"""

from __future__ import annotations

import difflib
import re
from functools import cache
from typing import NamedTuple

from controller.physics.constants import ATOMIC_MASS, ELECTRON_MASS_U
from controller.physics.nuclides import nuclides

_WHOLE = re.compile(r"((?:\d+[A-Z][a-z]?)+(?:_[1-9]\d?)?)(\++)", re.ASCII)
_PART = re.compile(r"(\d+)([A-Z][a-z]?)(?:_(\d+))?", re.ASCII)
MAX_CHARGE = 4


class Ion(NamedTuple):
    """A positive ion. ``neutral_u`` is the mass with all electrons (fractionation laws use it)."""

    label: str
    neutral_u: float
    mass_u: float
    charge: int
    mass_kg: float
    mass_to_charge: float  # u per elementary charge


@cache
def parse_ion(label: str) -> Ion:
    """The ion of a label. Raises ValueError with the form expected or the nearest nuclide."""
    whole = _WHOLE.fullmatch(label)
    if whole is None or len(whole.group(2)) > MAX_CHARGE:
        raise ValueError(
            f"{label!r} is not an ion label: write mass number and symbol of each atom, then its charge, "
            "for example 208Pb+, 238U16O+, 208Pb++, 40Ar_2+ (a count stands last)"
        )
    table = nuclides()
    neutral = 0.0
    for number, symbol, count in _PART.findall(whole.group(1)):
        nuclide = table.get((symbol, int(number)))
        if nuclide is None:
            known = [f"{n.mass_number}{n.symbol}" for n in table.values()]
            near = difflib.get_close_matches(f"{number}{symbol}", known, 3)
            hint = f"; nearest known: {', '.join(near)}" if near else ""
            raise ValueError(f"{number}{symbol} is not in the table of nuclides{hint}")
        neutral += nuclide.mass_u * int(count or 1)
    charge = len(whole.group(2))
    mass = neutral - charge * ELECTRON_MASS_U
    return Ion(label, neutral, mass, charge, mass * ATOMIC_MASS, mass / charge)
