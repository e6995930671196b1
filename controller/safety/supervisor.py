"""The tick: reads all, freezes, judges, acts, records. The heart of a run.

* Deadlines are absolute multiples of the period. A tick that comes late is counted and judged.
* On a cause: latch, act on all outputs at once, only then write and tell. Nothing on that way waits.
* The watchdog is fed only by a tick that read, judged and acted, in time.
* It goes on ticking through trips and parking, until it is closed.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Mapping

from controller.config.instrument import Instrument
from controller.errors import NotPermitted
from controller.record.journal import Journal
from controller.safety.board import Board
from controller.safety.gateway import Gateway
from controller.safety.interlocks import NS, fresh_memory, judge_tick
from controller.safety.lowering import Lowering
from controller.safety.parking import Parking, ParkingOutcome
from controller.safety.proving import Finding, Prover
from controller.safety.reflex import Listener, Reflex
from controller.safety.safestate import judge_reset
from controller.safety.sampling import Sample, Sampler
from controller.safety.values import OUTPUTS, Cause, Refusal, Snapshot
from controller.safety.words import describe
from drivers.clock import Clock
from drivers.contract import DeviceError, Monitor, Reading

PAUSED_NS = 1_000_000_000  # row 15b
_new_snapshot = tuple.__new__


class Supervisor:
    """One per run. ``run`` is its task; everything else may be called from the same loop."""

    def __init__(
        self,
        instrument: Instrument,
        board: Board,
        gateway: Gateway,
        monitors: Mapping[str, Monitor],
        clock: Clock,
        *,
        journal: Journal,
        watchdog: Callable[[], None] | None = None,
    ) -> None:
        self._board, self._clock, self._journal, self._watchdog = board, clock, journal, watchdog
        self._tick_ns = round(instrument.interlocks.tick * NS)
        self._overrun_ns = round(instrument.interlocks.overrun_trip * NS)
        self._sampler = Sampler(instrument, monitors)
        self.channels = self._sampler.channels
        self._slots = {channel.name: slot for slot, channel in enumerate(self.channels)}
        self._memory = fresh_memory(board.envelope)
        self._present: tuple[Cause, ...] = ()
        self._fault_said: str | None = None
        self._waiters: list[asyncio.Future[None]] = []
        self._closing = False
        self._number = 0  # of the tick under way, or of the next
        self._ended: asyncio.Future[None]
        self._timer: asyncio.TimerHandle
        self.ticks = 0
        self.overruns = 0
        lowering = Lowering(board, gateway, clock, self.wait_tick)
        self._reflex = Reflex(board, lowering, journal)
        self._prover = Prover(instrument, board, gateway, monitors, clock, wait_tick=self.wait_tick)
        self._parking = Parking(
            board,
            lowering,
            clock,
            journal,
            wait_tick=self.wait_tick,
            dwell_seconds=instrument.interlocks.settle_before_parked,
        )

    @property
    def listener(self) -> Listener | None:
        """Who is told of trips and stops, after the outputs have been acted on."""
        return self._reflex.listener

    @listener.setter
    def listener(self, listener: Listener | None) -> None:
        self._reflex.listener = listener

    # --- what the sequence may ask ---------------------------------------------------------------

    @property
    def snapshot(self) -> Snapshot:
        """What the last tick saw."""
        return self._board.snapshot

    @property
    def latched(self) -> bool:
        """Whether a trip stands."""
        return self._board.latches.first_out is not None

    @property
    def first_out(self) -> Cause | None:
        """The first cause of the trip that stands."""
        return self._board.latches.first_out

    @property
    def causes(self) -> tuple[Cause, ...]:
        """All causes latched since the last reset, in the order in which they came."""
        return self._board.latches.causes

    def index(self, channel: str) -> int:
        """The slot of a channel in ``snapshot.readings``. Raises KeyError for a name nobody offers."""
        return self._slots[channel]

    def reading(self, channel: str) -> Reading:
        """A channel as the last tick saw it."""
        return self._board.snapshot.readings[self._slots[channel]]

    async def wait_tick(self) -> None:
        """Return after the next tick has been judged. Raises RuntimeError when ticking has ended."""
        if self._closing:
            raise RuntimeError("the supervisor has been closed")
        waiter: asyncio.Future[None] = asyncio.get_running_loop().create_future()
        self._waiters.append(waiter)
        await waiter

    async def prove(self, *, wait: bool = True) -> list[Finding]:
        """Identify every device, give and read back limits, look for energised outputs and for what
        forbids a start. ``wait``: let permissives that hold mature for their hold time."""
        findings = await self._prover.prove(wait=wait)
        for finding in findings:
            if finding.verdict != "pass":
                self._journal.event(
                    self._clock.mono_ns(), "warning", "proving", finding.role,
                    f"{finding.what}: {finding.verdict}: {finding.text}",
                )  # fmt: skip
        return findings

    def start(self) -> None:
        """The explicit start. It permits, and energises nothing. Raises NotPermitted."""
        latches = self._board.latches
        if latches.first_out is not None:
            raise NotPermitted(f"latched: {describe(latches.first_out)}")
        for name, proven in zip(OUTPUTS, latches.proven, strict=True):
            if not proven:
                raise NotPermitted(f"{name} is not proven. Next: run `trackfield check`")
        self._board.replace(latches._replace(started=True))
        self._journal.event(self._clock.mono_ns(), "info", "start", "safety", "explicit start")

    def reset(self, first_out: str, operator: str) -> Refusal | None:
        """A person's reset, naming the first-out. It only permits; None when it was accepted."""
        board = self._board
        answer = judge_reset(board.envelope, board.snapshot, board.latches, self._present, first_out)
        now = self._clock.mono_ns()
        if isinstance(answer, Refusal):
            self._journal.event(now, "warning", "reset", operator, f"reset refused: {answer.text()}")
            return answer
        board.replace(answer)
        self._reflex.clear()
        self._journal.event(now, "info", "reset", operator, f"reset of {first_out}")
        return None

    async def park(self, reason: str, abrupt: bool = False) -> ParkingOutcome:
        """Bring every output to zero and confirm it; immune to the caller's cancellation."""
        return await self._parking.park(reason, abrupt=abrupt)

    # --- what is reported from outside; judged at the next tick ----------------------------------

    def request_stop(self, reason: str) -> None:
        """An operator's or a signal's stop (row 12a)."""
        self._board.post("12a", "operator", reason)

    def device_failed(self, error: DeviceError) -> None:
        """A device failed somebody (row 7 for outputs, row 8 for the others)."""
        self._board.post("7" if error.role in OUTPUTS else "8", error.role, str(error))

    def internal_fault(self, text: str) -> None:
        """The program contradicts itself (row 12b)."""
        self._board.post("12b", "program", text)

    # --- the tick --------------------------------------------------------------------------------

    async def run(self) -> None:
        """Tick until closed."""
        self._number = -(-self._clock.mono_ns() // self._tick_ns)
        self._ended = asyncio.get_running_loop().create_future()
        self._sampler.poll_all()
        self._timer = self._clock.call_at_ns(self._number * self._tick_ns, self._on_time)
        try:
            await self._ended
        finally:
            self._closing = True
            self._timer.cancel()
            waiters, self._waiters = self._waiters, []
            for waiter in waiters:
                if not waiter.done():
                    waiter.set_exception(RuntimeError("the supervisor has ended"))

    def close(self) -> None:
        """Let ``run`` end in place of the next tick."""
        self._closing = True

    def _on_time(self) -> None:
        """The tick that is due; in virtual time also those after it, while nobody else has anything to do."""
        while self._one_tick():
            pass

    def _one_tick(self) -> bool:
        """One tick: read, freeze, judge, act. What is to be written and told comes after, in
        ``_conclude``: at once when nothing happened, else when the commands have left. Answers whether
        the next tick is due now."""
        if self._closing:
            if not self._ended.done():
                self._ended.set_result(None)
            return False
        period = self._tick_ns
        late = self._clock.mono_ns() - self._number * period
        if late > period:
            self._judge_lateness(late)
            self._number += late // period
        try:
            sample = self._tick(self._number)
            if self._present or self._board.latches.first_out is not None:
                new = self._reflex.act(self._present, self._board.snapshot.at_ns)
                if new:
                    # runs after the first steps of the tasks that were just made: those are the commands
                    asyncio.get_running_loop().call_soon(self._conclude_later, sample, late, new)
                    return False
        except Exception as error:  # noqa: BLE001 - the boundary: row 12b, and the watchdog starves
            self.internal_fault(f"{type(error).__name__}: {error} in the tick")
            return self._next()
        return self._conclude(sample, late, ())

    def _conclude_later(self, sample: Sample, late: int, new: tuple[Cause, ...]) -> None:
        if self._conclude(sample, late, new):
            self._on_time()

    def _conclude(self, sample: Sample, late: int, new: tuple[Cause, ...]) -> bool:
        try:
            for cause in new:
                self._reflex.say(cause)
            self._journal.telemetry(self._number, self._board.snapshot[1], sample[1], sample[2])
            if self._watchdog is not None and late <= self._tick_ns:
                self._watchdog()
        except Exception as error:  # noqa: BLE001 - the boundary: row 12b, and the watchdog starves
            self.internal_fault(f"{type(error).__name__}: {error} at the end of the tick")
        return self._next()

    def _next(self) -> bool:
        self.ticks += 1
        self._number += 1
        due = self._number * self._tick_ns
        if self._waiters:
            waiters, self._waiters = self._waiters, []
            for waiter in waiters:
                if not waiter.done():
                    waiter.set_result(None)
        elif self._clock.skip_to_ns(due):
            return True
        self._timer = self._clock.call_at_ns(due, self._on_time)
        return False

    def _judge_lateness(self, late_ns: int) -> None:
        """Count and judge a late tick. In virtual time a tick is never late, by the same sum."""
        self.overruns += 1
        missed = late_ns // self._tick_ns
        self._journal.event(
            self._clock.mono_ns(), "warning", "overrun", "tick",
            f"late by {late_ns / NS:.3f} s: {missed} ticks missed", {"missed": missed},
        )  # fmt: skip
        if late_ns > PAUSED_NS:
            self._board.post("15b", "clock", f"paused {late_ns / NS:.2f} s")
        elif late_ns > self._overrun_ns:
            self._board.post("12b", "tick", f"late by {late_ns / NS:.3f} s")

    def _tick(self, number: int) -> Sample:
        """Read, freeze, judge."""
        board, clock, sampler, fault = self._board, self._clock, self._sampler, self._journal.fault
        sampler.poll(number)
        at = clock.mono_ns()  # after the polls: a reading made during them is not from the future
        sample = sampler.collect(at)
        posts = board.take_posts()
        if fault is not None and fault != self._fault_said:
            self._fault_said = fault
            posts += (("13", "record", fault),)
        board.snapshot = snapshot = _new_snapshot(
            Snapshot, (number, at, sample[0], board.demands, board.live, posts)
        )
        before = self._memory
        memory, self._present = judge_tick(board.envelope, snapshot, before)
        if memory is not before:
            self._memory = memory
            if memory.held != board.latches.held:
                board.replace(board.latches._replace(held=memory.held))
        return sample
