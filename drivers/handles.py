"""The hands: supplies with a set-point, and outputs that are only on or off."""

from __future__ import annotations

from collections.abc import Awaitable, Callable

from drivers.contract import DeviceRefused, DeviceReplied, Limits, Link

Command = Callable[..., Awaitable[tuple[float, ...]]]


async def expect(role: str, command: Command, count: int, verb: str, *values: float) -> tuple[float, ...]:
    """Send ``verb`` and return its ``count`` answer values. Raises DeviceError."""
    answer = await command(verb, *values)
    if len(answer) != count:
        raise DeviceReplied(role, f"answer to `{verb}` has {len(answer)} values in place of {count}")
    return answer


class SupplyHandle:
    """The hand on a supply: set-point in the output's SI unit."""

    __slots__ = ("_command", "role")

    def __init__(self, role: str, link: Link) -> None:
        self.role = role
        self._command: Command = link.command

    async def write(self, value: float) -> None:
        """Give the set-point. Raises DeviceError."""
        await expect(self.role, self._command, 0, "set", value)

    async def enable(self) -> None:
        """Switch the output on. Raises DeviceError."""
        await expect(self.role, self._command, 0, "enable")

    async def disable(self) -> None:
        """Switch the output off. Raises DeviceError."""
        await expect(self.role, self._command, 0, "disable")

    async def write_limits(self, limits: Limits) -> None:
        """Give the device its own limits. Raises DeviceError."""
        await expect(self.role, self._command, 0, "set_limits", *limits)

    async def read_limits(self) -> Limits:
        """The limits that the device holds. Raises DeviceError."""
        return Limits(*await expect(self.role, self._command, 3, "limits"))


class GateHandle:
    """The hand on an output without a set-point: enable opens the gate or closes the permit line."""

    __slots__ = ("_command", "role")

    def __init__(self, role: str, link: Link) -> None:
        self.role = role
        self._command: Command = link.command

    async def write(self, value: float) -> None:
        """There is no set-point. Raises DeviceRefused."""
        raise DeviceRefused(self.role, f"has no set-point to take {value!r}")

    async def enable(self) -> None:
        """Open the gate, or close the permit line. Raises DeviceError."""
        await expect(self.role, self._command, 0, "enable")

    async def disable(self) -> None:
        """Shut the gate, or open the permit line. Raises DeviceError."""
        await expect(self.role, self._command, 0, "disable")

    async def write_limits(self, limits: Limits) -> None:
        """There are none. Raises DeviceRefused."""
        raise DeviceRefused(self.role, f"holds no limits to be set to {limits!r}")

    async def read_limits(self) -> Limits:
        """There are none. Raises DeviceRefused."""
        raise DeviceRefused(self.role, "holds no limits")
