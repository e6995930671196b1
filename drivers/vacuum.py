"""A vacuum gauge."""

from __future__ import annotations

from drivers.polled import Family, Quantity


class VacuumGauge(Family):
    """Total pressure. A gauge that is off reads zero, and zero is no pressure: it is not plausible."""

    quantities = (Quantity("pascals", "Pa", 1e-13, 2e5),)
