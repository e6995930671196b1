"""The cooling water: a flow meter and a flow switch."""

from __future__ import annotations

from drivers.polled import Family, Quantity


class Water(Family):
    """Two unlike witnesses of the same water."""

    quantities = (Quantity("flow", "m3/s", -1e-4, 0.1), Quantity("switch", "", 0.0, 1.0))
