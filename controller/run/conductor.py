"""The one task that moves the state machine.

Events come in with a priority (a trip first, then an operator's stop, then the rest) and, where they
are the outcome of an action, with the action's generation: the late "done" of a cancelled ramp is
dropped, not obeyed. External events (signals, requests) only set inputs here; the loop acts on them.

When the supervisor trips it has already acted on the outputs. The conductor then only follows: it
cancels the action under way, moves to ``tripped`` and lets the supervisor park.
"""

from __future__ import annotations

import asyncio
import heapq
from dataclasses import dataclass
from enum import IntEnum

from controller.errors import ExitCode
from controller.run.actions import Actions, RunStopped
from controller.run.machine import Event, RunMachine, State, targets
from controller.run.rig import Refused, Rig
from controller.safety.parking import ParkingOutcome
from controller.safety.reflex import SupervisorEvent
from controller.safety.values import Trip
from drivers.contract import DeviceError

ANSWERS = targets()


class Priority(IntEnum):
    """Order in which waiting events are taken."""

    TRIP = 0
    STOP = 1
    HOLD = 2
    OUTCOME = 3


@dataclass(frozen=True, slots=True, order=True)
class _Posted:
    priority: Priority
    number: int
    event: Event
    generation: int | None  # None: valid whatever is under way
    reason: str


@dataclass(frozen=True, slots=True)
class Outcome:
    """How a run ended: the state it reached, the exit code, and why in words."""

    state: State
    exit_code: ExitCode
    reason: str


class Conductor:
    """Runs one sequence from ``parked`` to ``parked`` (or to ``unconfirmed``)."""

    def __init__(self, rig: Rig, actions: Actions) -> None:
        self._rig, self._actions = rig, actions
        self.machine = RunMachine()
        self._queue: list[_Posted] = []
        self._posted = 0
        self._generation = 0
        self._wake: asyncio.Future[None] | None = None
        self._action: asyncio.Task[None] | None = None
        self._exit_code = ExitCode.DONE
        self._reason = "all blocks read"
        self.parking: ParkingOutcome | None = None

    @property
    def state(self) -> State:
        return self.machine.state

    # --- inputs ----------------------------------------------------------------------------------

    def stop(self, reason: str) -> None:
        """An operator's stop: parks at the next turn of the loop."""
        self._post(Event.STOP, Priority.STOP, None, reason)

    def hold(self, reason: str) -> None:
        """Suspend the sequence, outputs as they are."""
        self._post(Event.HOLD, Priority.HOLD, None, reason)

    def resume(self, reason: str) -> None:
        """Go on after a hold: centring first, then the stop that was interrupted."""
        self._post(Event.RESUME, Priority.HOLD, None, reason)

    def told(self, event: SupervisorEvent) -> None:
        """What the supervisor says, after it has acted on the outputs. Its first-out decides the exit."""
        if event.kind == "stop":
            self._post(Event.STOP, Priority.STOP, None, event.text)
            return
        self._post(Event.TRIP, Priority.TRIP, None, event.text)
        if event.kind == "trip" and self._exit_code in (ExitCode.DONE, ExitCode.STOPPED):
            self._exit_code, self._reason = event.exit_code, event.text

    def _post(self, event: Event, priority: Priority, generation: int | None, reason: str) -> None:
        self._posted += 1
        heapq.heappush(self._queue, _Posted(priority, self._posted, event, generation, reason))
        if self._wake is not None and not self._wake.done():
            self._wake.set_result(None)

    # --- the loop --------------------------------------------------------------------------------

    async def run(self) -> Outcome:
        """Take events until the run has ended. The supervisor must be ticking."""
        self._post(Event.PROVE, Priority.OUTCOME, None, "")
        while True:
            posted = await self._next()
            state = self.machine.state
            if posted.generation is not None and posted.generation != self._generation:
                continue  # the outcome of an action that was cancelled
            if (state, posted.event) not in ANSWERS:
                self._rig.event(
                    "info", "unanswered", f"{posted.event.value} is not answered in state {state.value}"
                )
                continue
            if posted.generation is None:
                await self._end_action()  # an outcome, by contrast, comes from an action that has ended
            target = self.machine.fire(posted.event)
            self._rig.record.state(self._rig.clock.mono_ns(), state.value, posted.event.value, target.value)
            self._note(posted, state)
            if target in (State.PARKED, State.UNCONFIRMED):
                return self._outcome(target)
            self._start_action(target)

    def _note(self, posted: _Posted, before: State) -> None:
        """Keep why the run ends, once: a trip's reason stands, a stop's does not replace it."""
        if posted.event is Event.STOP and self._exit_code is ExitCode.DONE:
            self._exit_code, self._reason = ExitCode.STOPPED, posted.reason
        if posted.event in (Event.STOP, Event.HOLD, Event.RESUME):
            self._rig.event("info", posted.event.value, f"{posted.reason} (was {before.value})")

    def _outcome(self, state: State) -> Outcome:
        if state is State.UNCONFIRMED:
            return Outcome(state, ExitCode.PARKED_UNCONFIRMED, self._reason)
        return Outcome(state, self._exit_code, self._reason)

    async def _next(self) -> _Posted:
        while not self._queue:
            self._wake = asyncio.get_running_loop().create_future()
            await self._wake
        return heapq.heappop(self._queue)

    # --- actions ---------------------------------------------------------------------------------

    def _start_action(self, state: State) -> None:
        self._generation += 1
        self._action = asyncio.create_task(self._act(state, self._generation), name=f"action {state.value}")

    async def _end_action(self) -> None:
        task, self._action = self._action, None
        if task is None or task.done():
            return
        task.cancel()
        await asyncio.wait([task])  # its failure, if any, was posted with a generation now past

    async def _act(self, state: State, generation: int) -> None:
        try:
            event = await self._work(state)
        except RunStopped as stopped:
            self._ending(stopped.exit_code, str(stopped))
            event = Event.REFUSED if state is State.PROVING else Event.STOP
        except Refused as refused:
            if isinstance(refused.verdict, Trip):
                return  # the trip itself arrives from the supervisor
            self._ending(ExitCode.NOT_PERMITTED, f"refused: {refused}")
            event = Event.STOP
        except DeviceError as error:
            self._rig.supervisor.device_failed(error)  # judged there; a trip follows if it is one
            return
        except Exception as error:  # noqa: BLE001 - the boundary: row 12b, internal fault
            self._rig.supervisor.internal_fault(f"{type(error).__name__}: {error} in {state.value}")
            return
        if event is not None:
            self._post(event, Priority.OUTCOME, generation, "")

    async def _work(self, state: State) -> Event | None:
        if state is State.TRIPPED:
            return Event.PARK
        if state is State.HOLDING:
            return None  # until an operator resumes or stops
        if state is State.PARKING:
            await self._actions.quiet()
            outcome = await self._rig.supervisor.park(self._reason)
            self.parking = outcome
            return Event.CONFIRMED if outcome.confirmed else Event.UNCONFIRMED
        return await self._actions.table[state]()

    def _ending(self, exit_code: ExitCode, reason: str) -> None:
        if self._exit_code is ExitCode.DONE:
            self._exit_code, self._reason = exit_code, reason
            self._rig.event("warning", "ending", reason)
