"""Which driver speaks to which device: an explicit table, loaded when asked, extendable by packages.

A package of its own adds a driver by an entry point in the group ``trackfield.drivers`` whose name is
the driver's and whose object is a class like those of the table: ``open(role, link, now_ns)`` ->
``Opened``. It cannot replace a driver of the table.
"""

from __future__ import annotations

from importlib import import_module
from importlib.metadata import entry_points
from typing import Protocol, cast

from drivers.contract import DeviceAbsent, Link, Opened
from drivers.gates import NowNs

GROUP = "trackfield.drivers"

DRIVERS = {
    "magnet-supply": "drivers.magnet:MagnetSupply",
    "field-probe": "drivers.probe:FieldProbe",
    "high-voltage": "drivers.high_voltage:HighVoltage",
    "esa-pair": "drivers.esa:EsaPair",
    "source-gate": "drivers.source_gate:SourceGate",
    "counter": "drivers.counter:Counter",
    "electrometer": "drivers.electrometer:Electrometer",
    "vacuum-gauge": "drivers.vacuum:VacuumGauge",
    "water": "drivers.water:Water",
    "interlock-inputs": "drivers.interlock:InterlockInputs",
    "permit-output": "drivers.interlock:PermitOutput",
}


class Driver(Protocol):
    """What a registered class offers."""

    def open(self, role: str, link: Link, now_ns: NowNs) -> Opened: ...


def driver_names() -> list[str]:
    """All names that an instrument file may use."""
    return sorted({*DRIVERS, *(point.name for point in entry_points(group=GROUP))})


def open_device(role: str, driver: str, link: Link, now_ns: NowNs) -> Opened:
    """Open the driver named ``driver`` over ``link``; nothing is sent yet.

    ``now_ns`` is the monotonic clock by which readings are timed. Raises DeviceAbsent for an unknown
    driver.
    """
    return _driver(role, driver).open(role, link, now_ns)


def _driver(role: str, name: str) -> Driver:
    target = DRIVERS.get(name)
    if target is not None:
        module, _, attribute = target.partition(":")
        return cast(Driver, getattr(import_module(module), attribute))
    for point in entry_points(group=GROUP, name=name):
        return cast(Driver, point.load())
    raise DeviceAbsent(role, f"no driver is called {name!r}; known: {', '.join(driver_names())}")
