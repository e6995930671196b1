"""The hand on an output that speaks the telegrams of docs/telegrams.md.

The link is private to the handle: whoever holds only a monitor cannot reach a write.
"""

from __future__ import annotations

from drivers.contract import DeviceReplied, Limits, Link


class TelegramHandle:
    """``drivers.contract.OutputHandle`` over a link."""

    def __init__(self, role: str, link: Link) -> None:
        self.role = role
        self.__link = link

    async def write(self, value: float) -> None:
        await self.__link.command("set", value)

    async def enable(self) -> None:
        await self.__link.command("enable")

    async def disable(self) -> None:
        await self.__link.command("disable")

    async def write_limits(self, limits: Limits) -> None:
        await self.__link.command("set_limits", *limits)

    async def read_limits(self) -> Limits:
        values = await self.__link.command("limits")
        if len(values) != 3:
            raise DeviceReplied(self.role, f"limits not understood: {values!r:.80}")
        return Limits(*values)


class GateHandle(TelegramHandle):
    """An output that is only open or shut: it has no set-point and no limits to hold."""

    async def write(self, value: float) -> None:
        """Zero shuts; any other value is a defect of the caller and refused by the device."""
        if value == 0:
            await self.disable()
        else:
            raise DeviceReplied(self.role, f"has no set-point, asked for {value!r}")

    async def write_limits(self, limits: Limits) -> None:
        """Nothing to limit."""

    async def read_limits(self) -> Limits:
        return Limits(0.0, 0.0, 0.0)
