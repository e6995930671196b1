"""The field probe in the magnet's gap."""

from __future__ import annotations

from collections.abc import Callable

from drivers.contract import Link, Opened
from drivers.polled import PolledMonitor, Quantity

# Values of a report, in the order of docs/telegrams.md; the ranges only tell an answer from garbage.
QUANTITIES = (Quantity("tesla", "T", -20.0, 20.0),)


def open_device(role: str, link: Link, now_ns: Callable[[], int]) -> Opened:
    """Make the device over its link."""
    monitor = PolledMonitor(role, QUANTITIES, link, now_ns)
    return Opened(monitor, None, None)
