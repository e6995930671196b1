"""The one hand on the switches: sole holder of the outputs' write handles.

Every write passes the guard, judged on the supervisor's present snapshot at the present instant.

* ``request`` is the sequence's way. It writes first, then acts; what energises for the first time waits
  until the record is durable, and is then judged again.
* ``withdraw`` takes energy away, for trips and parking. It acts first, then writes, and nothing on its
  way waits for the record.

Two locks per output keep commands from interleaving: the *turn* of the requests, held for a whole
request, and the *line*, held only while a command is with the device. A withdrawal takes the line
alone, so a request that waits for the disk cannot delay it.
"""

from __future__ import annotations

import asyncio
from collections.abc import Mapping
from math import isfinite

from controller.errors import RecordAtRisk
from controller.record.journal import Journal
from controller.safety.board import Board
from controller.safety.guard import Answer, granted, judge, lowers
from controller.safety.values import (
    HIGH_VOLTAGE,
    INDEX,
    OUTPUTS,
    PERMIT,
    SOURCE,
    Action,
    Permit,
    Refusal,
    Request,
    Trip,
)
from drivers.clock import Clock
from drivers.contract import DeviceError, DeviceRefused, Limits, OutputHandle

ATTEMPTS = 3  # of one command that was not answered; what the device refused is not repeated
PERMIT_NAME = OUTPUTS[PERMIT]
NEED_THE_LINE = (*HIGH_VOLTAGE, SOURCE)


class Gateway:
    """Requests in, verdicts out, and where the verdict permits, the device told."""

    def __init__(
        self, handles: Mapping[str, OutputHandle], board: Board, clock: Clock, journal: Journal
    ) -> None:
        self._handles = {name: handles[name] for name in OUTPUTS}
        self._board, self._clock, self._journal = board, clock, journal
        self._turns = {name: asyncio.Lock() for name in OUTPUTS}
        self._lines = {name: asyncio.Lock() for name in OUTPUTS}

    async def request(self, output: str, action: Action, value: float = 0.0) -> Answer:
        """Ask the guard, and act if it permits. Never raises for what the plant or the disk does.

        ``value`` in the output's SI unit. A failure of the device or of the record comes back as a
        ``Trip``; the supervisor acts on it at its next tick.
        """
        if output not in self._turns:
            return self._record(
                Request(output, action, value, self._clock.mono_ns()), Refusal("no such output")
            )
        async with self._turns[output]:
            if action is Action.ENABLE and self._needs_the_line(output):
                # the permit line is closed with the first output that needs it, never before
                line = await self.request(PERMIT_NAME, Action.ENABLE)
                if not isinstance(line, Permit):
                    return line
            return await self._request(output, action, value)

    def _needs_the_line(self, output: str) -> bool:
        board = self._board
        if INDEX[output] not in NEED_THE_LINE or board.latches.enabled[PERMIT]:
            return False
        # a request that the guard refuses anyway must not close the line
        closed = board.latches._replace(
            enabled=tuple(on or number == PERMIT for number, on in enumerate(board.latches.enabled))
        )
        asked = Request(output, Action.ENABLE, 0.0, self._clock.mono_ns())
        return isinstance(judge(board.envelope, board.snapshot, closed, asked), Permit)

    async def _request(self, output: str, action: Action, value: float) -> Answer:
        board, line = self._board, self._lines[output]
        request = Request(output, action, value, self._clock.mono_ns())
        before = board.latches
        verdict = self._record(request, judge(board.envelope, board.snapshot, before, request))
        if not isinstance(verdict, Permit):
            return verdict
        waits = line.locked()
        if self._energises_first(request):
            waits = True
            try:
                await self._journal.durable()
            except RecordAtRisk as error:
                return self._failed("13", "record", str(error))
        async with line:
            if waits:  # the world has moved on since the verdict
                request = request._replace(at_ns=self._clock.mono_ns())
                verdict = judge(board.envelope, board.snapshot, board.latches, request)
                if not isinstance(verdict, Permit):
                    return self._record(request, verdict)
            board.replace(granted(board.latches, request))
            try:
                await self._send(request)
            except DeviceError as error:
                return self._failed("7", output, str(error))
        return verdict

    def _energises_first(self, request: Request) -> bool:
        if request.action is Action.WRITE:
            return request.value > 0 and self._board.latches.demands[INDEX[request.output]] == 0
        return request.action is Action.ENABLE

    def _failed(self, row: str, source: str, detail: str) -> Trip:
        self._board.post(row, source, detail)
        return Trip(detail, row=row)

    async def withdraw(self, output: str, action: Action, value: float = 0.0) -> Answer:
        """Take energy away at once: act first, write after. Raises DeviceError when the device fails.

        Refuses whatever does not lower the output.
        """
        board, error = self._board, None
        request = Request(output, action, value, self._clock.mono_ns())
        if not lowers(board.latches, request):
            return self._record(request, Refusal("not a withdrawal", value))
        async with self._lines[output]:
            request = request._replace(at_ns=self._clock.mono_ns())
            verdict = judge(board.envelope, board.snapshot, board.latches, request)
            if isinstance(verdict, Permit):
                board.replace(granted(board.latches, request))
                try:
                    await self._tell(request)
                except DeviceError as failure:
                    error = failure
        self._record(request, verdict)
        if error is not None:
            raise error
        return verdict

    async def prove_limits(self, output: str, limits: Limits) -> Limits:
        """Give a device its own limits and return what it then holds. Raises DeviceError."""
        async with self._lines[output]:
            await self._handles[output].write_limits(limits)
            return await self._handles[output].read_limits()

    # --- the wire --------------------------------------------------------------------------------

    async def _send(self, request: Request) -> None:
        """Send, and send again what was not answered, as long as nothing has tripped."""
        for attempt in range(1, ATTEMPTS + 1):
            try:
                await self._tell(request)
                return
            except DeviceRefused:
                raise
            except DeviceError:
                if attempt == ATTEMPTS or self._board.latches.first_out is not None:
                    raise

    async def _tell(self, request: Request) -> None:
        handle = self._handles[request.output]
        if request.action is Action.WRITE:
            await handle.write(request.value)
        elif request.action is Action.ENABLE:
            await handle.enable()
        else:
            await handle.disable()

    def _record(self, request: Request, verdict: Answer) -> Answer:
        self._journal.request(
            request.at_ns,
            request.output,
            request.action.value,
            request.value if request.action is Action.WRITE else None,
            type(verdict).__name__.lower(),
            verdict.reason,
            verdict.value if isfinite(verdict.value) else None,
            verdict.limit if isfinite(verdict.limit) else None,
            verdict.age_ns if verdict.age_ns >= 0 else None,
        )
        if isinstance(verdict, Trip) and self._board.latches.first_out is None:
            self._board.post(verdict.row, request.output, verdict.text())
        return verdict
