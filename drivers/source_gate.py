"""The gate that lets ions leave the source."""

from __future__ import annotations

from drivers.handles import GateHandle
from drivers.polled import Family, Quantity


class SourceGate(Family):
    """Open 1, shut 0."""

    quantities = (Quantity("open", "", 0.0, 1.0),)
    with_status = True
    handle_class = GateHandle
