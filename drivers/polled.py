"""The monitor that all families share: ask, validate, turn into readings.

What a report must be, before any of it counts as good:

* a tuple (sequence, status, values) of the family's length, whole-number sequence and status;
* a sequence that has advanced. An unchanged one is a frozen device or one polled too fast: the old
  readings stay with their old time, so that they grow stale by themselves. One that went back is a
  late answer or a reboot: unusable, and the next one is compared with it;
* every value a finite float inside the channel's plausible range.

One unusable reply is discarded and asked again at once. The second in a row, or the third within a
minute, makes the readings BAD: a line that needs asking twice so often is not to be trusted.
Silence changes nothing here: it is seen by whoever holds the clock, as age.

This is on the tick's path, hence the unrolled builder of readings.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from math import nan
from typing import ClassVar, NamedTuple

from drivers.contract import (
    Channel,
    Deliver,
    DeviceError,
    DeviceReplied,
    Identity,
    Link,
    Opened,
    Quality,
    Reading,
    Report,
)
from drivers.gates import GatedDetector, NowNs
from drivers.handles import GateHandle, SupplyHandle

ENABLED, REMOTE, TRIPPED, MOVING, GATE_RUNNING = 1, 2, 4, 8, 16  # status bits
STATUS_VALUES = tuple(float(status) for status in range(32))

BAD_ALLOWED = 2  # discards within BAD_WINDOW that are forgiven
BAD_WINDOW_NS = 60_000_000_000


class Quantity(NamedTuple):
    """One value of a family's report: SI unit and the range outside which it cannot be true."""

    name: str
    unit: str
    low: float
    high: float


Build = Callable[[tuple[object, ...], float, int], "tuple[Reading, ...] | None"]


def _builder(role: str, quantities: tuple[Quantity, ...], with_status: bool) -> Build:
    """The function that turns good values into readings, unrolled for one device.

    Written out as a loop it costs half as much again, and it runs a hundred times per second of
    instrument time. It answers None for a value that is no plausible float, and raises ValueError for
    a wrong number of values.
    """
    names = [f"v{number}" for number in range(len(quantities))]
    tests = [
        f"{name}.__class__ is float and {quantity.low!r} <= {name} <= {quantity.high!r}"
        for name, quantity in zip(names, quantities, strict=True)
    ]
    sources = [*(quantity.name for quantity in quantities), *(["status"] if with_status else [])]
    readings = [
        f"new(Reading, ({name}, GOOD, now, {f'{role}.{source}'!r}, ''))"
        for name, source in zip([*names, "status"], sources, strict=False)
    ]
    code = (
        "def build(values, status, now, new=new, Reading=Reading, GOOD=GOOD):\n"
        f"    {', '.join(names)}, = values\n"
        f"    if {' and '.join(tests)}:\n"
        f"        return ({', '.join(readings)},)\n"
        "    return None\n"
    )
    scope: dict[str, Build] = {}
    exec(code, {"new": tuple.__new__, "Reading": Reading, "GOOD": Quality.GOOD}, scope)
    return scope["build"]


class PolledMonitor:
    """The eyes on one device. Holds of the link only what looks: no command can be reached."""

    __slots__ = (
        "_asked_again",
        "_bad_ns",
        "_build",
        "_close",
        "_count",
        "_deliver_bound",
        "_identify",
        "_names",
        "_now_ns",
        "_ranges",
        "_readings",
        "_request",
        "_sequence",
        "_with_status",
        "channels",
        "role",
    )

    def __init__(
        self,
        role: str,
        quantities: tuple[Quantity, ...],
        *,
        with_status: bool,
        request_report: Callable[[Deliver], None],
        identify: Callable[[], tuple[str, str, str, str, bool]],
        close: Callable[[], None],
        now_ns: NowNs,
    ) -> None:
        self.role = role
        channels = [Channel(f"{role}.{each.name}", each.unit) for each in quantities]
        if with_status:
            channels.append(Channel(f"{role}.status", ""))
        self.channels = tuple(channels)
        self._names = tuple(channel.name for channel in channels)
        self._ranges = tuple((each.low, each.high) for each in quantities)
        self._count = len(quantities)
        self._with_status = with_status
        self._request, self._identify, self._close = request_report, identify, close
        self._now_ns = now_ns
        self._readings = tuple(
            Reading(nan, Quality.ABSENT, -1, name, "nothing heard yet") for name in self._names
        )
        self._sequence = -1
        self._asked_again = False
        self._bad_ns: deque[int] = deque(maxlen=BAD_ALLOWED + 1)
        self._deliver_bound = self._deliver
        self._build = _builder(role, quantities, with_status)

    async def identify(self) -> Identity:
        """Ask who is there. Raises DeviceError."""
        return Identity(*self._identify())

    def poll(self) -> None:
        """Begin one exchange; in process it has ended when this returns."""
        self._asked_again = False
        self._request(self._deliver_bound)

    def latest(self) -> tuple[Reading, ...]:
        """The last known readings. The same object until something new was heard."""
        return self._readings

    def close(self) -> None:
        """Release the line. Touches no output."""
        self._close()

    def _deliver(self, report: Report | DeviceError) -> None:
        try:
            sequence, status, values = report  # type: ignore[misc]
            if (
                sequence.__class__ is int
                and sequence > self._sequence
                and status.__class__ is int
                and values.__class__ is tuple
                and status >= 0
            ):
                readings = self._build(values, STATUS_VALUES[status], self._now_ns())
                if readings is not None:
                    self._sequence, self._readings = sequence, readings
                    return
        except (TypeError, ValueError, IndexError):
            pass  # garbled: said with its reason below
        self._unusual(report)

    def _unusual(self, report: object) -> None:
        """Everything that is not a plain good report."""
        if isinstance(report, DeviceError) and not isinstance(report, DeviceReplied):
            return  # silence: the readings age
        values, problem = self._explain(report)
        if not problem:
            return  # frozen, or asked too soon: the readings keep their time
        now = self._now_ns()
        if all(value is not None for value in values) and values:
            self._accept(values, now, problem)  # whole numbers sent as such
            return
        self._bad_ns.append(now)
        often = len(self._bad_ns) > BAD_ALLOWED and now - self._bad_ns[0] <= BAD_WINDOW_NS
        if not self._asked_again and not often:
            self._asked_again = True
            self._request(self._deliver_bound)
            return
        self._accept(values, now, problem)

    def _accept(self, values: list[float | None], now: int, problem: str) -> None:
        padded = values if values else [None] * len(self._names)
        self._readings = tuple(
            Reading(nan, Quality.BAD, now, name, problem)
            if value is None
            else Reading(value, Quality.GOOD, now, name)
            for value, name in zip(padded, self._names, strict=True)
        )

    def _explain(self, report: object) -> tuple[list[float | None], str]:
        """Values that can be used (None where one cannot), and what is wrong; "" for a frozen device."""
        raw = f"{report!r:.120}"
        if isinstance(report, DeviceReplied):
            return [], str(report)
        if not isinstance(report, tuple) or len(report) != 3:
            return [], f"not a report: {raw}"
        sequence, status, values = report
        if type(sequence) is not int or sequence < 0 or type(status) is not int:
            return [], f"sequence or status is not a whole number: {raw}"
        if not 0 <= status < len(STATUS_VALUES):
            return [], f"status has bits that are not in the table: {raw}"
        if not isinstance(values, tuple) or len(values) != self._count:
            return [], f"{self._count} values expected: {raw}"
        if sequence == self._sequence:
            return [], ""
        before, self._sequence = self._sequence, sequence
        if sequence < before:
            return [], f"sequence went back from {before}: {raw}"
        usable: list[float | None] = [
            float(value) if type(value) in (int, float) and low <= value <= high else None
            for value, (low, high) in zip(values, self._ranges, strict=True)
        ]
        if self._with_status:
            usable.append(STATUS_VALUES[status])
        return usable, f"value outside the plausible range or not a number: {raw}"


class Family:
    """What the devices of one kind share; a family's file fills the class attributes in."""

    quantities: ClassVar[tuple[Quantity, ...]]
    with_status: ClassVar[bool] = False
    handle_class: ClassVar[type[SupplyHandle] | type[GateHandle] | None] = None
    detector_class: ClassVar[type[GatedDetector] | None] = None

    @classmethod
    def open(cls, role: str, link: Link, now_ns: NowNs) -> Opened:
        """The monitor, and where the family has them the handle and the detector, as separate objects."""
        monitor = PolledMonitor(
            role,
            cls.quantities,
            with_status=cls.with_status,
            request_report=link.request_report,
            identify=link.identify,
            close=link.close,
            now_ns=now_ns,
        )
        handle = cls.handle_class(role, link) if cls.handle_class is not None else None
        detector = cls.detector_class(role, link, now_ns) if cls.detector_class is not None else None
        return Opened(monitor, handle, detector)
