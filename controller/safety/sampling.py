"""Reading in: polls what is due and keeps the readings of all channels, and what of them is new.

On the tick's path: plain tuples and slots, no objects per reading.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from math import lcm, nan
from typing import NamedTuple

from controller.config.instrument import Instrument
from controller.safety.interlocks import NS
from drivers.contract import Channel, Monitor, Reading

PLAN_MAX = 4096  # ticks


class _Device:
    """One monitor's place in the snapshot and in the schedule of polls."""

    __slots__ = ("every", "latest", "offset", "poll", "seen", "start", "stop")

    def __init__(self, monitor: Monitor, start: int, every: int, offset: int) -> None:
        self.poll, self.latest = monitor.poll, monitor.latest
        self.start, self.stop = start, start + len(monitor.channels)
        self.every, self.offset = every, offset
        self.seen: tuple[Reading, ...] = ()


class Sample(NamedTuple):
    """What a tick has read: all readings; for the record only what was heard since the last one."""

    readings: tuple[Reading, ...]
    values: list[float | None]
    notes: str | None


class Sampler:
    """Polls each device every whole number of ticks, in a fixed order."""

    def __init__(self, instrument: Instrument, monitors: Mapping[str, Monitor]) -> None:
        self.channels: tuple[Channel, ...] = tuple(
            channel for monitor in monitors.values() for channel in monitor.channels
        )
        self._tick_ns = round(instrument.interlocks.tick * NS)
        self._devices: list[_Device] = []
        slot = 0
        for number, (role, monitor) in enumerate(monitors.items()):
            every = max(1, round(getattr(instrument.devices, role).poll / instrument.interlocks.tick))
            # offsets spread devices of equal period over different ticks
            self._devices.append(_Device(monitor, slot, every, number % every))
            slot = self._devices[-1].stop
        self._cycle = lcm(*(device.every for device in self._devices))
        # who is due, per tick of the cycle; a cycle too long for a table is worked out as it goes
        self._plan = [self._due(number) for number in range(self._cycle)] if self._cycle <= PLAN_MAX else []
        self._expected: list[_Device] = []  # asked, and not heard since
        self._readings: list[Reading] = [
            reading for monitor in monitors.values() for reading in monitor.latest()
        ]
        # nan is stored as nothing, and binds to the database without the search that a None starts
        self._blank: list[float | None] = [nan] * slot
        self._not_good: dict[str, str] = {}  # channel -> why, as last noted

    def _due(self, number: int) -> list[_Device]:
        return [device for device in self._devices if not (number - device.offset) % device.every]

    def poll_all(self) -> None:
        """Ask every device once, before the first tick."""
        for device in self._devices:
            device.poll()
        self._expected = self._devices.copy()

    def poll(self, number: int) -> None:
        """Ask the devices that are due at tick ``number``."""
        expected = self._expected
        for device in self._plan[number % self._cycle] if self._plan else self._due(number):
            device.poll()
            if device not in expected:
                expected.append(device)

    def collect(self, at_ns: int) -> Sample:
        """Take in what has been heard."""
        readings, values, not_good = self._readings, self._blank.copy(), self._not_good
        notes: dict[str, object] | None = None
        silent: list[_Device] = []
        for device in self._expected:
            heard = device.latest()
            if heard is device.seen:
                silent.append(device)
                continue
            device.seen = heard
            slot = device.start
            readings[slot : device.stop] = heard
            for reading in heard:
                if reading[1] or not_good:
                    notes = self._quality(notes, reading)
                if not reading[1]:
                    values[slot] = reading[0]
                slot += 1
            if at_ns - reading[2] > self._tick_ns:
                notes = {**(notes or {}), reading[3].partition(".")[0]: {"heard_ns": reading[2]}}
        self._expected = silent
        return Sample(tuple(readings), values, json.dumps(notes) if notes else None)

    def _quality(self, notes: dict[str, object] | None, reading: Reading) -> dict[str, object] | None:
        """Note a channel whose quality has changed."""
        why = f"{reading.quality.name.lower()}: {reading.detail}" if reading.quality else ""
        if self._not_good.get(reading.source, "") == why:
            return notes
        if why:
            self._not_good[reading.source] = why
        else:
            del self._not_good[reading.source]
        return {**(notes or {}), reading.source: why or "good again"}
