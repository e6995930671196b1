"""A link to a device's twin in the same process: telegrams are passed as they are.

The twin is duck-typed and never trusted: it may not answer (``None``), or answer with anything at all.
The checks are the same as for a wire, so that nothing is kinder in a rehearsal.
"""

from __future__ import annotations

import math
from typing import Any

from drivers.contract import Deliver, DeviceRefused, DeviceReplied, DeviceTimeout

# The answer codes of docs/telegrams.md.
CODES = {
    1: "unknown command",
    2: "value outside the device's own limits",
    3: "not in remote control",
    4: "the device has tripped",
    5: "not ready",
}


class InProcessLink:
    """One twin's conversation, as ``drivers.contract.Link``."""

    def __init__(self, role: str, twin: Any) -> None:
        self._role, self._twin = role, twin
        self._report = twin.report

    def identify(self) -> tuple[str, str, str, str, bool]:
        """Raises DeviceTimeout, DeviceReplied."""
        answer = self._twin.identity()
        if answer is None:
            raise DeviceTimeout(self._role, "no answer to the identity query")
        if not (isinstance(answer, tuple) and len(answer) == 5):
            raise DeviceReplied(self._role, f"identity not understood: {answer!r:.80}")
        maker, model, serial, firmware, simulated = answer
        return str(maker), str(model), str(serial), str(firmware), simulated is True

    def request_report(self, deliver: Deliver) -> None:
        answer = self._report()
        deliver(DeviceTimeout(self._role, "no reply") if answer is None else answer)

    async def command(self, verb: str, *values: float) -> tuple[float, ...]:
        """Raises DeviceTimeout, DeviceReplied, DeviceRefused."""
        answer = self._twin.command(verb, *values)
        if answer is None:
            raise DeviceTimeout(self._role, f"no reply to {verb}")
        return checked(self._role, verb, answer)

    def close(self) -> None:
        """Nothing to release in process."""


def checked(role: str, verb: str, answer: object) -> tuple[float, ...]:
    """The values of a command's answer, or the error that its code names."""
    if not (isinstance(answer, tuple) and answer and all(type(part) in (int, float) for part in answer)):
        raise DeviceReplied(role, f"reply to {verb} not understood: {answer!r:.80}")
    code = answer[0]
    if code != 0:
        raise DeviceRefused(
            role, f"{verb}: {CODES.get(int(code) if math.isfinite(code) else -1, f'code {code}')}"
        )
    if not all(math.isfinite(part) for part in answer):
        raise DeviceReplied(role, f"reply to {verb} is not finite: {answer!r:.80}")
    return answer[1:]
