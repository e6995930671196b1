"""The gate of a detector over a link."""

from __future__ import annotations

from drivers.contract import DeviceReplied, Integration, Link

NS = 1_000_000_000


class TelegramDetector:
    """``drivers.contract.Detector``: opens a gate, fetches what it integrated."""

    def __init__(self, role: str, link: Link) -> None:
        self.role = role
        self._link = link
        self._asked = 0.0

    async def start(self, seconds: float) -> None:
        self._asked = seconds
        await self._link.command("gate", seconds)

    async def collect(self) -> Integration:
        """Raises DeviceRefused while the gate runs, DeviceReplied for an impossible result."""
        values = await self._link.command("gate_read")
        if len(values) != 5:
            raise DeviceReplied(self.role, f"gate result not understood: {values!r:.80}")
        started, ended, live, total, overrange = values
        # a gate may be a little longer or shorter than asked, never another gate's length
        if not (ended > started >= 0 and 0.9 * self._asked <= live <= 1.1 * self._asked + 0.01):
            raise DeviceReplied(self.role, f"gate of {self._asked:g} s answered {values!r:.80}")
        return Integration(round(started * NS), round(ended * NS), live, total, overrange != 0)
