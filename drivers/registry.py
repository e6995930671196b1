"""Which driver speaks to which kind of device: one explicit table, imported when used.

A package of somebody else's adds drivers through the entry-point group ``trackfield.drivers``; each
entry point names a class with the signature of the families here.
"""

from __future__ import annotations

import importlib
from collections.abc import Callable
from importlib.metadata import entry_points
from typing import Protocol, cast

from drivers.contract import DeviceAbsent, Link, Opened

GROUP = "trackfield.drivers"

DRIVERS: dict[str, str] = {
    "magnet-supply": "drivers.magnet:open_device",
    "field-probe": "drivers.probe:open_device",
    "high-voltage": "drivers.high_voltage:open_device",
    "esa-pair": "drivers.esa:open_device",
    "source-gate": "drivers.source_gate:open_device",
    "counter": "drivers.counter:open_device",
    "electrometer": "drivers.electrometer:open_device",
    "vacuum-gauge": "drivers.vacuum:open_device",
    "water": "drivers.water:open_device",
    "interlock-inputs": "drivers.interlock:open_inputs",
    "permit-output": "drivers.interlock:open_permit",
}


class Opener(Protocol):
    """How a family makes its device."""

    def __call__(self, role: str, link: Link, now_ns: Callable[[], int]) -> Opened: ...


def names() -> list[str]:
    """All drivers known, ours and others'."""
    return sorted({*DRIVERS, *(point.name for point in entry_points(group=GROUP))})


def open_device(role: str, driver: str, link: Link, now_ns: Callable[[], int]) -> Opened:
    """Make the device of a role with the driver of that name. Raises DeviceAbsent for an unknown one."""
    where = DRIVERS.get(driver)
    if where is not None:
        module, _, name = where.partition(":")
        return cast("Opener", getattr(importlib.import_module(module), name))(role, link, now_ns)
    for point in entry_points(group=GROUP):
        if point.name == driver:
            return cast("Opener", point.load())(role, link, now_ns)
    raise DeviceAbsent(role, f"no driver named {driver!r}; known: {', '.join(names())}")
