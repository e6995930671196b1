"""The run's state machine: two literal tables and nothing else.

Standing rules:

* Everything that decides which state may follow which lives in this file. What a state *does* lives
  in ``actions.py``; who moves the machine lives in ``conductor.py``.
* The library (``transitions``) holds the table and refuses what is not in it. It runs synchronously,
  without callbacks, without automatic any-to-any triggers, and never ignores a trigger: an event
  that a state does not list raises ``IllegalEvent`` and leaves the state as it was.
* Every state answers TRIP, and every state from which something may be energised answers STOP.
* The safety decision is never in here. The supervisor has already acted when TRIP arrives.
"""

from __future__ import annotations

from enum import Enum, unique

from transitions import Machine, MachineError


@unique
class State(Enum):
    """Where a run can be. The words are the vocabulary of screens and records."""

    PARKED = "parked"
    PROVING = "proving"
    READY = "ready"
    ENERGISING = "energising"
    CONDITIONING = "conditioning"
    STEPPING = "stepping"
    SETTLING = "settling"
    DWELLING = "dwelling"
    READING = "reading"
    CENTRING = "centring"
    HOLDING = "holding"
    PARKING = "parking"
    TRIPPED = "tripped"
    UNCONFIRMED = "unconfirmed"


@unique
class Event(Enum):
    """What can move a run from one state to another."""

    PROVE = "prove"  # identify the devices, read everything back, outputs presumed energised
    PROVED = "proved"
    REFUSED = "refused"  # a permissive or a device is missing
    START = "start"  # the explicit start; nothing is energised without it
    ENERGISED = "energised"
    CONDITIONED = "conditioned"  # the magnet's history is now known
    CENTRED = "centred"
    STEPPED = "stepped"  # set-points given
    SETTLED = "settled"  # field and voltages have arrived, or are marked late
    RETRY = "retry"  # not arrived: step once more
    DWELT = "dwelt"
    NEXT = "next"  # another stop of this block
    RECENTRE = "recentre"  # block boundary
    FINISH = "finish"  # all blocks read
    HOLD = "hold"
    RESUME = "resume"
    STOP = "stop"  # operator, signal, or a run that cannot go on
    TRIP = "trip"  # the supervisor has tripped
    PARK = "park"  # after a trip: confirm the outputs at zero
    CONFIRMED = "confirmed"
    UNCONFIRMED = "unconfirmed"


S, E = State, Event

STATES: tuple[State, ...] = tuple(State)

# The states in which the sequence is under way and its work can be suspended.
WORKING: tuple[State, ...] = (S.CONDITIONING, S.CENTRING, S.STEPPING, S.SETTLING, S.DWELLING, S.READING)

# The states from which an operator's stop leads to parking.
STOPPABLE: tuple[State, ...] = (S.PROVING, S.READY, S.ENERGISING, *WORKING, S.HOLDING)

TRANSITIONS: tuple[tuple[Event, State, State], ...] = (
    (E.PROVE, S.PARKED, S.PROVING),
    (E.PROVE, S.UNCONFIRMED, S.PROVING),
    (E.PROVED, S.PROVING, S.READY),
    (E.REFUSED, S.PROVING, S.PARKING),
    (E.START, S.READY, S.ENERGISING),
    (E.ENERGISED, S.ENERGISING, S.CONDITIONING),
    (E.CONDITIONED, S.CONDITIONING, S.CENTRING),
    (E.CENTRED, S.CENTRING, S.STEPPING),
    (E.STEPPED, S.STEPPING, S.SETTLING),
    (E.SETTLED, S.SETTLING, S.DWELLING),
    (E.RETRY, S.SETTLING, S.STEPPING),
    (E.DWELT, S.DWELLING, S.READING),
    (E.NEXT, S.READING, S.STEPPING),
    (E.RECENTRE, S.READING, S.CENTRING),
    (E.FINISH, S.READING, S.PARKING),
    *((E.HOLD, state, S.HOLDING) for state in WORKING),
    (E.RESUME, S.HOLDING, S.CENTRING),
    *((E.STOP, state, S.PARKING) for state in STOPPABLE),
    *((E.TRIP, state, S.TRIPPED) for state in STATES if state not in (S.TRIPPED, S.UNCONFIRMED)),
    (E.TRIP, S.TRIPPED, S.TRIPPED),  # a later cause is listed, not promoted
    (E.TRIP, S.UNCONFIRMED, S.UNCONFIRMED),  # already as bad as can be said
    (E.PARK, S.TRIPPED, S.PARKING),
    (E.CONFIRMED, S.PARKING, S.PARKED),
    (E.UNCONFIRMED, S.PARKING, S.UNCONFIRMED),
)


class IllegalEvent(RuntimeError):
    """An event that the present state does not list. The state is unchanged."""

    def __init__(self, state: State, event: Event) -> None:
        super().__init__(f"state {state.value} does not answer the event {event.value}")
        self.state, self.event = state, event


class RunMachine:
    """The table with a typed face: ``fire`` is the only way to move it."""

    def __init__(self, initial: State = State.PARKED) -> None:
        self.state: State = initial  # kept by the library
        self._machine = Machine(
            model=self,
            states=list(STATES),
            transitions=[
                {"trigger": event.value, "source": source, "dest": target}
                for event, source, target in TRANSITIONS
            ],
            initial=initial,
            auto_transitions=False,
            ignore_invalid_triggers=False,
            model_override=False,
        )
        self._triggers = {event: self._machine.events[event.value] for event in Event}

    def fire(self, event: Event) -> State:
        """Move by one event and return the new state.

        Raises IllegalEvent, with the state unchanged, for a pair that the table does not list.
        """
        before = self.state
        try:
            self._triggers[event].trigger(self)
        except MachineError as error:
            raise IllegalEvent(before, event) from error
        return self.state


def targets() -> dict[tuple[State, Event], State]:
    """The table as a mapping; raises ValueError where two rows answer the same pair."""
    answer: dict[tuple[State, Event], State] = {}
    for event, source, target in TRANSITIONS:
        if (source, event) in answer:
            raise ValueError(f"two rows answer ({source.value}, {event.value})")
        answer[source, event] = target
    return answer


def _validate() -> None:
    """Checks at import what the library would notice only on first use."""
    answer = targets()
    for state in STATES:
        if (state, Event.TRIP) not in answer:
            raise ValueError(f"state {state.value} does not answer a trip")
    reached = {State.PARKED}
    frontier = [State.PARKED]
    while frontier:
        here = frontier.pop()
        for (source, _event), target in answer.items():
            if source is here and target not in reached:
                reached.add(target)
                frontier.append(target)
    lost = [state.value for state in STATES if state not in reached]
    if lost:
        raise ValueError(f"states never reached: {lost}")


_validate()
