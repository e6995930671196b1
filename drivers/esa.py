"""The pair of supplies of the electrostatic analyser's plates, driven as one difference."""

from __future__ import annotations

from collections.abc import Callable

from drivers.contract import Link, Opened
from drivers.output import TelegramHandle
from drivers.polled import PolledMonitor, Quantity

# Values of a report, in the order of docs/telegrams.md; the ranges only tell an answer from garbage.
QUANTITIES = (
    Quantity("outer_volts", "V", -100000.0, 100000.0),
    Quantity("inner_volts", "V", -100000.0, 100000.0),
    Quantity("set_volts", "V", -100000.0, 100000.0),
    Quantity("amps", "A", -10.0, 10.0),
)


def open_device(role: str, link: Link, now_ns: Callable[[], int]) -> Opened:
    """Make the device over its link."""
    monitor = PolledMonitor(role, QUANTITIES, link, now_ns)
    return Opened(monitor, TelegramHandle(role, link), None)
