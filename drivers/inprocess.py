"""A link to a device's twin that lives in this process.

The twin is any object with three methods (docs/telegrams.md), so that nothing here names a simulator:

* ``identity()`` -> (maker, model, serial, firmware, simulated), or None for no answer;
* ``report()`` -> (sequence, status, values), or None for no answer, or anything else for a garbled one;
* ``command(verb, *values)`` -> (code, *values), or None for no answer.

A report is passed on as it came: the monitor validates, the link only carries.
"""

from __future__ import annotations

import math
from typing import Any, Protocol

from drivers.contract import Deliver, DeviceRefused, DeviceReplied, DeviceTimeout

# Meaning of the answer's code, from docs/telegrams.md.
CODES = {
    1: "the verb is unknown to the device",
    2: "the value is outside the device's own limits",
    3: "the device is not in remote control",
    4: "the device has tripped by itself",
    5: "the device is not ready",
}


class Twin(Protocol):
    """What a device in this process must offer. Answers are objects: they may be garbled."""

    def identity(self) -> object: ...

    def report(self) -> object: ...

    def command(self, verb: str, *values: float) -> object: ...


class InProcessLink:
    """Carries one device's telegrams by calling its twin. Implements ``drivers.contract.Link``."""

    __slots__ = ("_command", "_identity", "_report", "role")

    def __init__(self, role: str, twin: Twin) -> None:
        self.role = role
        self._identity, self._report, self._command = twin.identity, twin.report, twin.command

    def identify(self) -> tuple[str, str, str, str, bool]:
        """Ask who is there. Raises DeviceTimeout, DeviceReplied."""
        answer = self._identity()
        if answer is None:
            raise DeviceTimeout(self.role, "no answer to the question who is there")
        if not isinstance(answer, tuple) or [type(part) for part in answer] != [str, str, str, str, bool]:
            raise DeviceReplied(self.role, f"identity could not be read: {answer!r:.80}")
        return answer

    def request_report(self, deliver: Deliver) -> None:
        """Fetch one report and deliver it at once."""
        answer: Any = self._report()  # whatever it is: the driver looks at it before it believes it
        if answer is None:
            answer = DeviceTimeout(self.role, "no answer to a poll")
        deliver(answer)

    async def command(self, verb: str, *values: float) -> tuple[float, ...]:
        """Send one command. Raises DeviceTimeout, DeviceReplied, DeviceRefused."""
        answer = self._command(verb, *values)
        if answer is None:
            raise DeviceTimeout(self.role, f"no answer to `{verb}`; whether it was obeyed is unknown")
        if not isinstance(answer, tuple) or not answer or not all(map(_is_number, answer)):
            raise DeviceReplied(self.role, f"answer to `{verb}` could not be read: {answer!r:.80}")
        if answer[0] != 0:
            said = CODES.get(answer[0], f"code {answer[0]} is not in the table")
            raise DeviceRefused(self.role, f"`{verb}` refused: {said}")
        return answer[1:]

    def close(self) -> None:
        """Nothing to release: the twin outlives the link."""


def _is_number(part: object) -> bool:
    return isinstance(part, (int, float)) and not isinstance(part, bool) and math.isfinite(part)
