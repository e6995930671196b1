"""The hardwired chain: its echoed inputs, and the software permit line."""

from __future__ import annotations

from drivers.handles import GateHandle
from drivers.polled import Family, Quantity


class InterlockInputs(Family):
    """1 healthy, 0 not. The chain acts without us; these are its echoes."""

    quantities = (
        Quantity("cover_a", "", 0.0, 1.0),
        Quantity("cover_b", "", 0.0, 1.0),
        Quantity("emergency_stop", "", 0.0, 1.0),
        Quantity("thermostat", "", 0.0, 1.0),
        Quantity("mains", "", 0.0, 1.0),
    )


class PermitOutput(Family):
    """The line in series with the hardwired chain: software can open the chain, never close it over."""

    quantities = (Quantity("echo", "", 0.0, 1.0),)
    handle_class = GateHandle
