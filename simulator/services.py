"""Vacuum, cooling water and the hardwired chain, as simple dynamic plants in closed form."""

from __future__ import annotations

import math

ATMOSPHERE = 1e5


class Level:
    """A quantity that goes exponentially to its goal; in log scale for pressures."""

    def __init__(self, value: float, seconds: float, *, logarithmic: bool) -> None:
        self._log = logarithmic
        self._from = self._goal = math.log(value) if logarithmic else value
        self._since, self._seconds = 0.0, seconds
        self.rest = self._still = value

    def go(self, t: float, goal: float, seconds: float) -> None:
        self._from = self._at(t)
        self._goal = math.log(goal) if self._log else goal
        self._still = goal
        self._since, self._seconds = t, seconds

    def at(self, t: float) -> float:
        if self._from == self._goal:
            return self._still
        value = self._at(t)
        return math.exp(value) if self._log else value

    def _at(self, t: float) -> float:
        age = (t - self._since) / self._seconds
        return self._goal + (self._from - self._goal) * math.exp(-age) if age < 60 else self._goal


class CoilHeat:
    """Coil temperature in K: heated by I^2 R, cooled by water, slowly without."""

    AMBIENT = 293.0
    HEAT_CAPACITY = 60.0 * 385.0  # J/K: sixty kilograms of copper
    COOLED, UNCOOLED = 25.0, 2.0  # W/K

    def __init__(self) -> None:
        self.kelvin = self.AMBIENT
        self._at = 0.0

    def advance(self, t: float, watts: float, *, water: bool) -> float:
        loss = self.COOLED if water else self.UNCOOLED
        goal = self.AMBIENT + watts / loss
        self.kelvin = goal + (self.kelvin - goal) * math.exp(-(t - self._at) * loss / self.HEAT_CAPACITY)
        self._at = t
        return self.kelvin
