"""What all monitors share: one poll, one validated set of readings.

Standing rules:

* An answer is checked for shape, type, finiteness and a plausible range before it is a reading.
* One unusable answer is discarded and the old reading ages; a second in a row makes the readings BAD.
* An answer whose sequence has not advanced comes from a frozen device: the old reading stays, with
  its old time, and ages by itself.
* No answer at all changes nothing: the readings age.

The poll runs every tick for every device, so the good path is kept to tuples and local names.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any, NamedTuple, cast

from drivers.contract import Channel, DeviceError, Identity, Link, Quality, Reading

_NEW = tuple.__new__
GOOD, BAD, ABSENT = Quality.GOOD, Quality.BAD, Quality.ABSENT


class Quantity(NamedTuple):
    """One value of a report: its name, SI unit, and the range outside which it is no answer."""

    name: str
    unit: str
    low: float
    high: float


class PolledMonitor:
    """The eyes on one device (``drivers.contract.Monitor``)."""

    def __init__(
        self,
        role: str,
        quantities: Sequence[Quantity],
        link: Link,
        now_ns: Callable[[], int],
    ) -> None:
        self.role = role
        self.channels = (
            *(Channel(f"{role}.{quantity.name}", quantity.unit) for quantity in quantities),
            Channel(f"{role}.status", ""),
        )
        self._checks = tuple(
            (quantity.low, quantity.high, channel.name)
            for quantity, channel in zip(quantities, self.channels, strict=False)
        )
        self._status_name = self.channels[-1].name
        self._length = len(self._checks)
        # the link itself is not kept: its `command` is none of a monitor's business
        self._request, self._identify, self._close = link.request_report, link.identify, link.close
        self._now_ns = now_ns
        self._readings = tuple(Reading(math.nan, ABSENT, -1, c.name, "never heard") for c in self.channels)
        self._sequence: int | None = None
        self._bad_in_a_row = 0
        self.faults = 0  # unusable or missing answers so far
        self.last_fault = ""

    async def identify(self) -> Identity:
        """Ask who is there. Raises DeviceError."""
        return Identity(*self._identify())

    def poll(self) -> None:
        self._request(self._deliver)

    def latest(self) -> tuple[Reading, ...]:
        return self._readings

    def close(self) -> None:
        self._close()

    def _deliver(self, answer: Any) -> None:
        try:
            sequence, status, values = answer
            if len(values) != self._length:
                raise ValueError(f"{len(values)} values, expected {self._length}")
            if sequence == self._sequence:
                return
            now = self._now_ns()
            readings = []
            for (low, high, name), value in zip(self._checks, values, strict=True):
                # a comparison is false for nan, and raises TypeError for what is not a number
                if not low <= value <= high:
                    raise ValueError(f"{name} = {value!r} outside {low:g} to {high:g}")
                readings.append(_NEW(Reading, (value, GOOD, now, name, "")))
            if not 0 <= status <= 255 or type(sequence) is not int:
                raise ValueError(f"status {status!r}, sequence {sequence!r}")
            readings.append(_NEW(Reading, (float(status), GOOD, now, self._status_name, "")))
        except (TypeError, ValueError, OverflowError) as error:
            self._unusable(answer, error)
            return
        self._sequence = sequence
        self._bad_in_a_row = 0
        self._readings = cast("tuple[Reading, ...]", tuple(readings))

    def _unusable(self, answer: object, error: Exception) -> None:
        self.faults += 1
        if isinstance(answer, DeviceError):
            self.last_fault = str(answer)
            return  # nothing was heard: the readings age
        self.last_fault = f"{self.role}: reply not usable ({error}): {answer!r:.120}"
        self._bad_in_a_row += 1
        if self._bad_in_a_row >= 2:
            now = self._now_ns()
            self._readings = tuple(
                Reading(math.nan, BAD, now, channel.name, self.last_fault) for channel in self.channels
            )
