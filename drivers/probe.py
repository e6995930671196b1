"""The field probe."""

from __future__ import annotations

from drivers.polled import Family, Quantity


class FieldProbe(Family):
    """Flux density in the magnet's gap."""

    quantities = (Quantity("tesla", "T", -25.0, 25.0),)
