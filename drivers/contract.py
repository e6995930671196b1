"""What a device must offer, and how it may fail.

Standing rules of this file:

* It imports nothing of ours; everything else may import it.
* A reading is never a bare float. "Stale" is judged by whoever holds the clock, from ``at_ns``.
* An output is two objects: a *monitor*, which can only look, and a *handle*, which can act. Only
  ``controller.safety.gateway`` ever holds a handle.
* A monitor's ``poll`` never blocks and never raises for a device's misbehaviour: the misbehaviour
  is the reading's quality.

All values are SI. Times are integer nanoseconds of the monotonic clock of ``drivers.clock``.
"""

from __future__ import annotations

from collections.abc import Callable
from enum import IntEnum
from typing import NamedTuple, Protocol, runtime_checkable


class Quality(IntEnum):
    """How far a reading can be trusted. Only GOOD carries a value that may be used."""

    GOOD = 0
    BAD = 1  # the device answered, and the answer is unusable (garbled, out of range, wrong echo)
    ABSENT = 2  # nothing has been heard at all


class Reading(NamedTuple):
    """One channel as last heard. ``value`` is meaningless unless ``quality`` is GOOD."""

    value: float
    quality: Quality
    at_ns: int  # when the device was heard; -1 if never
    source: str  # channel name, "role.channel"
    detail: str = ""  # why it is not good, with the raw reply


class Channel(NamedTuple):
    """A named quantity of a device: ``name`` is "role.quantity", ``unit`` its SI unit symbol."""

    name: str
    unit: str


class Identity(NamedTuple):
    """Who answered. ``simulated`` is told by the device itself, never by a setting."""

    maker: str
    model: str
    serial: str
    firmware: str
    simulated: bool


class Limits(NamedTuple):
    """Limits held in the device itself. ``maximum`` in the output's unit, slew in unit/s."""

    maximum: float
    slew_per_second: float
    watchdog_seconds: float  # 0 when the device has none


class Integration(NamedTuple):
    """One finished gate of a detector.

    ``total`` is pulses for a counter, volt-seconds for an electrometer. ``live_seconds`` is the
    gate's length as measured by the device, dead time *not* removed.
    """

    started_ns: int
    ended_ns: int
    live_seconds: float
    total: float
    overrange: bool


class DeviceError(Exception):
    """Any failure of a device. ``role`` names the device, so that a person knows where to look."""

    def __init__(self, role: str, message: str) -> None:
        super().__init__(f"{role}: {message}")
        self.role = role


class DeviceAbsent(DeviceError):
    """Opening failed: no port, no answer at all."""


class DeviceTimeout(DeviceError):
    """No reply before the deadline; whether the command was applied is unknown."""


class DeviceReplied(DeviceError):
    """The reply could not be used: garbled, truncated, wrong echo, not finite."""


class DeviceRefused(DeviceError):
    """The device understood and said no."""


@runtime_checkable
class Monitor(Protocol):
    """The eyes on one device."""

    role: str
    channels: tuple[Channel, ...]

    async def identify(self) -> Identity:
        """Ask who is there. Raises DeviceError."""

    def poll(self) -> None:
        """Begin (or, in process, perform) one exchange. Never blocks, never raises DeviceError."""

    def latest(self) -> tuple[Reading, ...]:
        """The last known readings, one per channel, in the order of ``channels``."""

    def close(self) -> None:
        """Release the line. Touches no output."""


@runtime_checkable
class OutputHandle(Protocol):
    """The hand on one output. Every method raises DeviceError on failure."""

    role: str

    async def write(self, value: float) -> None:
        """Set the set-point, in the output's SI unit."""

    async def enable(self) -> None: ...

    async def disable(self) -> None: ...

    async def write_limits(self, limits: Limits) -> None: ...

    async def read_limits(self) -> Limits: ...


@runtime_checkable
class Detector(Protocol):
    """A gate that integrates the beam. Harmless, so anybody may hold it."""

    role: str

    async def start(self, seconds: float) -> None:
        """Open the gate for ``seconds``. Raises DeviceError."""

    async def collect(self) -> Integration:
        """The gate that was last opened; DeviceReplied if it has not ended. Raises DeviceError."""


class Opened(NamedTuple):
    """A device as the registry hands it to the composition root."""

    monitor: Monitor
    handle: OutputHandle | None
    detector: Detector | None


# --- The layer below: telegrams -----------------------------------------------------------------
#
# A link carries one device's conversation as telegrams of floats. In process it calls the twin; a
# serial line turns telegrams into bytes by the device's dialect. The drivers above do not know
# which. Layouts are in docs/telegrams.md and are written a second time in the simulator.


class Report(NamedTuple):
    """Answer to a poll: ``sequence`` counts the device's own samples (a frozen one is stuck)."""

    sequence: int
    status: int  # bits of docs/telegrams.md
    values: tuple[float, ...]


Deliver = Callable[["Report | DeviceError"], None]


@runtime_checkable
class Link(Protocol):
    """One device's conversation."""

    def identify(self) -> tuple[str, str, str, str, bool]: ...

    def request_report(self, deliver: Deliver) -> None:
        """Ask for one report and return at once.

        ``deliver`` is called with the answer or the failure: at once in process, later from the
        event loop for a line.
        """

    async def command(self, verb: str, *values: float) -> tuple[float, ...]:
        """Send one command, await its reply's values. Raises DeviceError."""

    def close(self) -> None: ...
