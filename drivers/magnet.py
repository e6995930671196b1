"""The magnet supply."""

from __future__ import annotations

from drivers.handles import SupplyHandle
from drivers.polled import Family, Quantity


class MagnetSupply(Family):
    """Amps into the coil, with the coil's volts and temperature."""

    quantities = (
        Quantity("amps", "A", -1e3, 1e3),
        Quantity("coil_volts", "V", -1e3, 1e3),
        Quantity("set_amps", "A", -1e3, 1e3),
        Quantity("coil_kelvin", "K", 230.0, 700.0),
    )
    with_status = True
    handle_class = SupplyHandle
