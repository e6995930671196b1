"""The safety layer put together from opened devices, in the one right way."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import NamedTuple

from controller.config.instrument import Devices, Instrument
from controller.errors import Defect
from controller.record.journal import Journal
from controller.safety.board import Board
from controller.safety.envelope import build_envelope
from controller.safety.gateway import Gateway
from controller.safety.supervisor import Supervisor
from controller.safety.values import OUTPUTS
from drivers.clock import Clock
from drivers.contract import Channel, Opened

ROLES = tuple(Devices.model_fields)


class Safety(NamedTuple):
    """The supervisor that watches and the gateway that alone can act."""

    supervisor: Supervisor
    gateway: Gateway


def channels_of(opened: Mapping[str, Opened]) -> tuple[Channel, ...]:
    """All channels in the order of the snapshot and of the record's telemetry."""
    return tuple(channel for role in ROLES for channel in opened[role].monitor.channels)


def assemble(
    instrument: Instrument,
    opened: Mapping[str, Opened],
    clock: Clock,
    journal: Journal,
    *,
    watchdog: Callable[[], None] | None = None,
) -> Safety:
    """Wire the layer. ``opened`` has one device per role of the instrument file.

    Raises Defect where a role that is an output was opened without a handle.
    """
    handles = {}
    for name in OUTPUTS:
        handle = opened[name].handle
        if handle is None:
            raise Defect(f"the driver of {name} offers no handle, and {name} is an output")
        handles[name] = handle
    board = Board(build_envelope(instrument, channels_of(opened)))
    gateway = Gateway(handles, board, clock, journal)
    monitors = {role: opened[role].monitor for role in ROLES}
    supervisor = Supervisor(instrument, board, gateway, monitors, clock, journal=journal, watchdog=watchdog)
    return Safety(supervisor, gateway)
