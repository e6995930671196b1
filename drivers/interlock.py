"""The interlock inputs, and the permit line that the program may hold closed."""

from __future__ import annotations

from collections.abc import Callable

from drivers.contract import Link, Opened
from drivers.output import GateHandle
from drivers.polled import PolledMonitor, Quantity

# Values of a report, in the order of docs/telegrams.md: 1 healthy, 0 not.
INPUTS = (
    Quantity("cover_a", "", 0.0, 1.0),
    Quantity("cover_b", "", 0.0, 1.0),
    Quantity("emergency_stop", "", 0.0, 1.0),
    Quantity("thermostat", "", 0.0, 1.0),
    Quantity("mains", "", 0.0, 1.0),
)
PERMIT = (Quantity("echo", "", 0.0, 1.0),)


def open_inputs(role: str, link: Link, now_ns: Callable[[], int]) -> Opened:
    """The inputs of the hardwired chain, read only."""
    return Opened(PolledMonitor(role, INPUTS, link, now_ns), None, None)


def open_permit(role: str, link: Link, now_ns: Callable[[], int]) -> Opened:
    """The permit line: enable closes it, disable opens it; its echo is read back."""
    return Opened(PolledMonitor(role, PERMIT, link, now_ns), GateHandle(role, link), None)
