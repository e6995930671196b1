"""Parking: every output to zero by its safe route, and the proof that it got there.

Walks the steps of ``safestate.STEPS``. It runs in a task of its own, so that no cancellation of a caller
reaches it; a second caller joins the first. It needs the supervisor to tick, and nothing else: not the
sequence, not the record, not the disk.
"""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable
from typing import NamedTuple

from controller.errors import RecordAtRisk
from controller.record.journal import Journal
from controller.safety.board import Board
from controller.safety.interlocks import NS, PRIORITY
from controller.safety.lowering import Lowering
from controller.safety.safestate import (
    SAMPLES,
    deadline_seconds,
    implausible,
    latch,
    ramp_seconds,
    settled,
)
from controller.safety.values import (
    ACCELERATING,
    DETECTOR,
    ESA,
    HIGH_VOLTAGE,
    MAGNET,
    OUTPUTS,
    PERMIT,
    SOURCE,
    SUPPLIES,
    Cause,
    Effect,
    usable,
)
from drivers.clock import Clock

Lowered = asyncio.Task[bool] | None
Heard = list[tuple[int, float]]

FIRE_ORDER = (DETECTOR, ACCELERATING, ESA, MAGNET)
SHUT_SECONDS = 0.5  # source gate
TRUTH_SECONDS = 1.0  # set-points and enable bits after the commands
ECHO_SECONDS = 1.0  # permit line
SAY_SECONDS = 5.0
REBOUNDS = 1  # times that the truths are asked for again after a rebound


class OutputOutcome(NamedTuple):
    """What is known of one output after parking."""

    output: str
    confirmed: bool
    text: str


class ParkingOutcome(NamedTuple):
    """Parked (``confirmed``) or not, with the reason per output."""

    confirmed: bool
    outputs: tuple[OutputOutcome, ...]

    def text(self) -> str:
        """One line for a person."""
        if self.confirmed:
            return "all outputs commanded off, read back off, plausibly decayed, no rebound seen"
        open_ = "; ".join(f"{each.output}: {each.text}" for each in self.outputs if not each.confirmed)
        return f"SAFE NOT CONFIRMED: {open_}"


class Parking:
    """Runs the safe-state procedure, once at a time."""

    def __init__(
        self,
        board: Board,
        lowering: Lowering,
        clock: Clock,
        journal: Journal,
        *,
        wait_tick: Callable[[], Awaitable[None]],
        dwell_seconds: float,
    ) -> None:
        self._board, self._lowering, self._clock, self._journal = board, lowering, clock, journal
        self._wait_tick, self._dwell_seconds = wait_tick, dwell_seconds
        self._task: asyncio.Task[ParkingOutcome] | None = None

    async def park(self, reason: str, *, abrupt: bool) -> ParkingOutcome:
        """Park and say what is known. ``abrupt``: high voltage off at once instead of by ramp.

        The caller may be cancelled; the procedure is not.
        """
        if self._task is None or self._task.done():
            self._task = asyncio.create_task(self._walk(reason, abrupt), name="parking")
        elif abrupt:
            self._fire(abrupt=True)
        return await asyncio.shield(self._task)

    # --- the steps -------------------------------------------------------------------------------

    async def _walk(self, reason: str, abrupt: bool) -> ParkingOutcome:
        board = self._board
        board.replace(board.latches._replace(started=False))
        self._journal.event(
            self._clock.mono_ns(), "info", "parking", "safety", f"parking: {reason}", {"abrupt": abrupt}
        )
        try:
            await self._lowered(self._lowering.apply(SOURCE, Effect.OFF), SHUT_SECONDS)
            problems = await self._truths(self._fire(abrupt=abrupt))
            if not any(problems.values()):
                problems = await self._dwell()
        except Exception as error:  # noqa: BLE001 - whatever goes wrong, the answer is "not confirmed"
            problems = dict.fromkeys(range(PERMIT), f"parking failed: {type(error).__name__}: {error}")
        if any(problems.values()):
            self._lowering.apply(PERMIT, Effect.OFF)
        problems[PERMIT] = await self._open_permit()
        return await self._say(problems)

    def _fire(self, *, abrupt: bool) -> dict[int, Lowered]:
        effect = Effect.OFF if abrupt else Effect.RAMP
        return {
            output: self._lowering.apply(output, Effect.RAMP if output == MAGNET else effect)
            for output in FIRE_ORDER
        }

    async def _lowered(self, task: Lowered, seconds: float) -> None:
        """Wait for an output's commands; what comes of them is read back, whatever the device answered."""
        if task is not None:
            await asyncio.wait([task], timeout=seconds)

    async def _truths(self, tasks: dict[int, Lowered]) -> dict[int, str]:
        """Read back every output, each from the moment its own commands are through, until it is proven
        off or its time is up. Output -> problem or ""."""
        found = await asyncio.gather(
            self._gate_truth(SOURCE, SHUT_SECONDS),
            *(self._volts_truth(output, tasks.get(output)) for output in HIGH_VOLTAGE),
            self._amps_truth(tasks.get(MAGNET)),
        )
        return dict(zip((SOURCE, *HIGH_VOLTAGE, MAGNET), found, strict=True))

    async def _volts_truth(self, output: int, task: Lowered) -> str:
        limits = self._board.envelope.outputs[output]
        await self._lowered(task, ramp_seconds(limits, limits.maximum))
        problem, samples = await self._settles(output, deadline_seconds(limits))
        for each in samples.values():
            problem = problem or implausible(limits, tuple(each))
        return problem or await self._command_truth(output)

    async def _amps_truth(self, task: Lowered) -> str:
        limits = self._board.envelope.outputs[MAGNET]
        await self._lowered(task, ramp_seconds(limits, limits.maximum))
        problem, _ = await self._settles(MAGNET, ramp_seconds(limits, 0.0))
        return problem or await self._command_truth(MAGNET)

    async def _settles(self, output: int, seconds: float) -> tuple[str, dict[int, Heard]]:
        """Collect what is heard from now on until all read-backs of the output have settled below its
        safe value. The problem or "", and the samples per slot."""
        limits, since = self._board.envelope.outputs[output], self._clock.mono_ns()
        samples: dict[int, Heard] = {slot: [] for slot in limits.read_slots}
        # a decay begins where the output was when it was switched off at once
        for slot, reading in zip(limits.read_slots, self._lowering.off_from.pop(output, ()), strict=False):
            if usable(reading, reading.at_ns, limits.stale_ns):
                samples[slot].append((reading.at_ns, reading.value))
        while not all(settled(limits, tuple(each)) for each in samples.values()):
            if self._clock.mono_ns() > since + round(seconds * NS):
                return self._not_settled(output), samples
            await self._wait_tick()
            self._collect(output, samples, since)
        return "", samples

    async def _gate_truth(self, output: int, seconds: float) -> str:
        """A gate must read shut on a reading heard from now on."""
        limits, since = self._board.envelope.outputs[output], self._clock.mono_ns()
        deadline = since + round(seconds * NS) + limits.stale_ns
        while self._clock.mono_ns() <= deadline:
            await self._wait_tick()
            reading = self._board.snapshot.readings[limits.read_slots[0]]
            heard = reading.at_ns > since and usable(reading, self._clock.mono_ns(), limits.stale_ns)
            if heard and reading.value <= limits.safe:
                return ""
        return self._not_settled(output)

    async def _command_truth(self, output: int) -> str:
        """Set-point zero and output disabled, as the device itself reports them."""
        limits = self._board.envelope.outputs[output]
        deadline = self._clock.mono_ns() + round(TRUTH_SECONDS * NS) + limits.stale_ns
        while True:
            now = self._clock.mono_ns()
            held = self._board.snapshot.readings[limits.set_slot]
            zero = usable(held, now, limits.stale_ns) and abs(held.value) <= limits.safe
            off = self._status_off(output)
            if zero and off:
                return ""
            if now > deadline:
                return f"set-point reads {held.value:.4g} ({held.detail or held.quality.name.lower()}), " + (
                    "enable bit not readable" if off is None else "still enabled" if not off else "disabled"
                )
            await self._wait_tick()

    async def _dwell(self) -> dict[int, str]:
        """Keep watching for a rebound; after one the truths are asked for again, once."""
        for _ in range(REBOUNDS + 1):
            risen, problem = await self._watch()
            if not problem:
                return dict.fromkeys(range(PERMIT), "")
            self._journal.event(self._clock.mono_ns(), "warning", "rebound", OUTPUTS[risen], problem)
            problems = await self._truths(self._fire(abrupt=True))
            if any(problems.values()):
                return problems
        return {**problems, risen: problem}

    async def _watch(self) -> tuple[int, str]:
        """The first output whose read-back is lost or rises again during the dwell, and how."""
        until = self._clock.mono_ns() + round(self._dwell_seconds * NS)
        while self._clock.mono_ns() < until:
            await self._wait_tick()
            now = self._clock.mono_ns()
            for output in SUPPLIES:
                limits = self._board.envelope.outputs[output]
                for slot in limits.read_slots:
                    reading = self._board.snapshot.readings[slot]
                    if not usable(reading, now, limits.stale_ns) or abs(reading.value) > limits.safe:
                        return output, f"did not stay off: {self._not_settled(output)}"
        return PERMIT, ""

    async def _open_permit(self) -> str:
        try:
            await self._lowered(self._lowering.apply(PERMIT, Effect.OFF), SHUT_SECONDS)
            return await self._gate_truth(PERMIT, ECHO_SECONDS)
        except Exception as error:  # noqa: BLE001 - the last step before saying so
            return f"parking failed: {type(error).__name__}: {error}"

    async def _say(self, problems: dict[int, str]) -> ParkingOutcome:
        board, now = self._board, self._clock.mono_ns()
        outputs = tuple(
            OutputOutcome(name, not problems[number], problems[number] or "off, confirmed")
            for number, name in enumerate(OUTPUTS)
        )
        outcome = ParkingOutcome(not any(problems.values()), outputs)
        unproven = tuple(
            Cause(
                f"19:{each.output}", "19", "19", PRIORITY["19"], each.output,
                float("nan"), float("nan"), -1, now, each.text,
            )
            for each in outputs
            if not each.confirmed
        )  # fmt: skip
        # latched here and not posted: whoever parks already follows this, there is nobody to tell
        board.replace(latch(board.latches, unproven)._replace(confirmed=outcome.confirmed))
        self._journal.event(
            now,
            "info" if outcome.confirmed else "trip",
            "parked" if outcome.confirmed else "unconfirmed",
            "safety",
            outcome.text(),
            {each.output: each.text for each in outputs},
        )
        try:
            await asyncio.wait_for(self._journal.durable(), SAY_SECONDS)
        except (RecordAtRisk, TimeoutError) as error:
            board.post("13", "record", f"the end of parking could not be recorded: {error}")
        return outcome

    # --- reading ---------------------------------------------------------------------------------

    def _collect(self, output: int, samples: dict[int, Heard], since: int) -> None:
        """Add what was heard after ``since``; a sample counts once, and only while it is usable."""
        now, limits = self._clock.mono_ns(), self._board.envelope.outputs[output]
        for slot, heard in samples.items():
            reading = self._board.snapshot.readings[slot]
            if not usable(reading, now, limits.stale_ns):
                heard.clear()  # a gap in the evidence begins it again
            elif reading.at_ns > max(since, heard[-1][0] if heard else -1):
                heard.append((reading.at_ns, reading.value))

    def _status_off(self, output: int) -> bool | None:
        """Whether the device says that it is disabled; None when that cannot be read."""
        limits = self._board.envelope.outputs[output]
        status = self._board.snapshot.readings[limits.status_slot]
        if not usable(status, self._clock.mono_ns(), limits.stale_ns):
            return None
        return not int(status.value) & 1

    def _not_settled(self, output: int) -> str:
        limits = self._board.envelope.outputs[output]
        now, parts = self._clock.mono_ns(), []
        for slot in limits.read_slots:
            reading = self._board.snapshot.readings[slot]
            if usable(reading, now, limits.stale_ns):
                parts.append(f"{reading.source} reads {reading.value:.4g}, limit {limits.safe:g}")
            else:
                last = f"{(now - reading.at_ns) / NS:.1f} s ago" if reading.at_ns >= 0 else "never"
                parts.append(f"{reading.source} UNKNOWN, last heard {last} {reading.detail}".rstrip())
        return f"not seen below its limit {SAMPLES} times in a row: " + "; ".join(parts)
