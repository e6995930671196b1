"""A high-voltage supply: accelerating or detector."""

from __future__ import annotations

from drivers.handles import SupplyHandle
from drivers.polled import Family, Quantity


class HighVoltage(Family):
    """One output, positive as read; the polarity is the wiring's."""

    quantities = (
        Quantity("volts", "V", -1e3, 1e5),
        Quantity("amps", "A", -1.0, 10.0),
        Quantity("set_volts", "V", 0.0, 1e5),
    )
    with_status = True
    handle_class = SupplyHandle
