"""Bringing one output to zero: at once, or by its ramp. Trips and parking share this code.

One task per output, so that a hung device delays nobody. Asking again for the same or less is a no-op
while the task runs; asking for more replaces it.
"""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable
from math import isnan

from controller.safety.board import Board
from controller.safety.gateway import Gateway
from controller.safety.interlocks import NS, outranks
from controller.safety.safestate import ramp_seconds
from controller.safety.values import (
    MAGNET,
    OUTPUTS,
    SUPPLIES,
    Action,
    Effect,
    Permit,
    usable,
)
from drivers.clock import Clock
from drivers.contract import DeviceError, Reading

ATTEMPTS, PAUSE_SECONDS = 3, 0.1  # each command of the safe state: sent three times, 100 ms apart
SLOPE_SHARE = 1.0 - 1e-9  # a ramp stays under its limit by more than any rounding


class Lowering:
    """The tasks that bring outputs to zero."""

    def __init__(
        self, board: Board, gateway: Gateway, clock: Clock, wait_tick: Callable[[], Awaitable[None]]
    ) -> None:
        self._board, self._gateway, self._clock, self._wait_tick = board, gateway, clock, wait_tick
        self._tasks: dict[int, asyncio.Task[bool]] = {}
        self._effects: dict[int, Effect] = {}
        # output -> its read-backs as last heard before it was switched off at once
        self.off_from: dict[int, tuple[Reading, ...]] = {}

    def forget(self) -> None:
        """Forget where outputs were when they were switched off, after a reset."""
        self.off_from.clear()

    def apply(self, output: int, effect: Effect) -> asyncio.Task[bool] | None:
        """Begin (or go on) bringing ``output`` to zero by ``effect``; None where the guard's refusal of
        all that energises is enough. The task answers whether every command was acknowledged."""
        if effect < Effect.RAMP:
            return None
        task = self._tasks.get(output)
        if task is not None and not task.done():
            if not outranks(output, effect, self._effects[output]):
                return task
            task.cancel()
        self._effects[output] = effect
        work = self._off if effect is Effect.OFF or output not in SUPPLIES else self._ramp
        task = asyncio.create_task(self._guarded(work, output), name=f"lower {OUTPUTS[output]}")
        self._tasks[output] = task
        return task

    async def _guarded(self, work: Callable[[int], Awaitable[bool]], output: int) -> bool:
        try:
            return await work(output)
        except Exception as error:  # noqa: BLE001 - a defect here must trip, not vanish with its task
            self._board.post("12b", OUTPUTS[output], f"while lowering: {type(error).__name__}: {error}")
            return False

    async def _off(self, output: int) -> bool:
        """Disable, then zero: the output is dead before its set-point is touched, so that what is then
        seen to decay is the bleeder alone."""
        if self._board.latches.enabled[output]:
            limits, readings = self._board.envelope.outputs[output], self._board.snapshot.readings
            self.off_from[output] = tuple(readings[slot] for slot in limits.read_slots)
        disabled = await self._insist(output, Action.DISABLE)
        if not disabled and output == MAGNET:
            return await self._ramp(output)  # its current forbids an abrupt disconnection
        zeroed = await self._insist(output, Action.WRITE) if output in SUPPLIES else True
        return disabled and zeroed

    async def _ramp(self, output: int) -> bool:
        board, limits = self._board, self._board.envelope.outputs[output]
        if isnan(board.latches.demands[output]) and not self._adopt(output):
            return False if output == MAGNET else await self._off(output)
        began = self._clock.mono_ns()  # a long rest before the ramp buys no larger first step
        deadline = began + round(ramp_seconds(limits, board.latches.demands[output]) * NS)
        while (demand := board.latches.demands[output]) > 0:
            await self._wait_tick()
            now = self._clock.mono_ns()
            if now > deadline:
                return False
            # from the last permit, as the guard counts: in real time that is later than our last turn
            since = max(began, board.latches.permitted_ns[output])
            room = min(limits.per_second * ((now - since) / NS) * SLOPE_SHARE, limits.step)
            # what was refused or not acknowledged is tried again at the next tick, until the deadline
            await self._insist(output, Action.WRITE, max(demand - room, 0.0))
        if output == MAGNET:
            await self._wait_for_current(deadline)
        return await self._insist(output, Action.DISABLE)

    def _adopt(self, output: int) -> bool:
        """Take the demand from the device where nobody has proven it yet."""
        limits = self._board.envelope.outputs[output]
        reading = self._board.snapshot.readings[limits.set_slot]
        if not usable(reading, self._clock.mono_ns(), limits.stale_ns):
            return False
        latches = self._board.latches
        self._board.adopt(
            output,
            demand=max(reading.value, 0.0),
            enabled=latches.enabled[output],
            proven=latches.proven[output],
        )
        return True

    async def _wait_for_current(self, deadline: int) -> None:
        limits = self._board.envelope.outputs[MAGNET]
        while (now := self._clock.mono_ns()) <= deadline:
            reading = self._board.snapshot.readings[limits.read_slots[0]]
            if usable(reading, now, limits.stale_ns) and abs(reading.value) <= limits.safe:
                return
            await self._wait_tick()

    async def _insist(self, output: int, action: Action, value: float = 0.0) -> bool:
        """Send until acknowledged, a bounded number of times. False: it was not, or not permitted."""
        name = OUTPUTS[output]
        for attempt in range(1, ATTEMPTS + 1):
            try:
                return isinstance(await self._gateway.withdraw(name, action, value), Permit)
            except DeviceError as error:
                if attempt == ATTEMPTS:
                    self._board.post("7", name, str(error))
            await self._clock.sleep(PAUSE_SECONDS)
        return False
