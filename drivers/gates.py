"""The detectors' side of a counter or an electrometer: a gate that integrates the beam."""

from __future__ import annotations

from collections.abc import Callable

from drivers.contract import DeviceRefused, DeviceReplied, Integration, Link
from drivers.handles import expect

NowNs = Callable[[], int]

NS = 1_000_000_000
# A device's clock may differ from ours by its crystal and its resolution; more is a wrong reply.
FUTURE_NS = 50_000_000
# Difference of two times of up to a day as floats, with room.
ROUNDING_SECONDS = 1e-9


class GatedDetector:
    """Opens a gate and fetches what it collected. Implements ``drivers.contract.Detector``."""

    __slots__ = ("_asked_seconds", "_command", "_now_ns", "role")

    def __init__(self, role: str, link: Link, now_ns: NowNs) -> None:
        self.role = role
        self._command = link.command
        self._now_ns = now_ns
        self._asked_seconds = 0.0

    async def start(self, seconds: float) -> None:
        """Open the gate for ``seconds``. Raises DeviceError."""
        await expect(self.role, self._command, 0, "gate", seconds)
        self._asked_seconds = seconds

    async def collect(self) -> Integration:
        """The gate last opened. Raises DeviceReplied while it runs or when the answer is impossible."""
        started, ended, live, total, overrange = await self._fetch()
        length = ended - started
        if not 0 < live <= length + ROUNDING_SECONDS or abs(length - self._asked_seconds) > 0.5 * length:
            raise DeviceReplied(
                self.role,
                f"gate of {self._asked_seconds:g} s came back as {length:g} s with {live:g} s live",
            )
        if overrange not in (0.0, 1.0):
            raise DeviceReplied(self.role, f"over-range flag is {overrange:g}, not 0 or 1")
        ended_ns = round(ended * NS)
        if ended_ns > self._now_ns() + FUTURE_NS:
            raise DeviceReplied(self.role, f"gate ends at {ended:g} s, which is in the future")
        return Integration(round(started * NS), ended_ns, live, total, overrange == 1.0)

    async def _fetch(self) -> tuple[float, ...]:
        try:
            return await expect(self.role, self._command, 5, "gate_read")
        except DeviceRefused as refused:  # code 5: the gate still runs
            raise DeviceReplied(self.role, f"no gate to fetch: {refused}") from refused
