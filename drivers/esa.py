"""The pair of supplies of the electrostatic analyser, commanded as one."""

from __future__ import annotations

from drivers.handles import SupplyHandle
from drivers.polled import Family, Quantity


class EsaPair(Family):
    """Outer plate positive, inner plate negative; the set-point is outer minus inner."""

    quantities = (
        Quantity("outer_volts", "V", -1e3, 1e5),
        Quantity("inner_volts", "V", -1e5, 1e3),
        Quantity("set_volts", "V", 0.0, 1e5),
        Quantity("amps", "A", -1.0, 10.0),
    )
    with_status = True
    handle_class = SupplyHandle
