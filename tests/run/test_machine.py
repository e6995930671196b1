"""The run's state machine: every (state, event) pair, and the page that is drawn from the table."""

from __future__ import annotations

import itertools
from pathlib import Path

import pytest

from controller.run.diagram import page
from controller.run.machine import (
    STATES,
    STOPPABLE,
    WORKING,
    Event,
    IllegalEvent,
    RunMachine,
    State,
    targets,
)

DOCS = Path(__file__).parents[2] / "docs"

# Written by hand from the design's description of a run, not from the code's table: the path of a
# plain run, state by state.
PLAIN_RUN = [
    (Event.PROVE, "proving"),
    (Event.PROVED, "ready"),
    (Event.START, "energising"),
    (Event.ENERGISED, "conditioning"),
    (Event.CONDITIONED, "centring"),
    (Event.CENTRED, "stepping"),
    (Event.STEPPED, "settling"),
    (Event.SETTLED, "dwelling"),
    (Event.DWELT, "reading"),
    (Event.NEXT, "stepping"),
    (Event.STEPPED, "settling"),
    (Event.RETRY, "stepping"),
    (Event.STEPPED, "settling"),
    (Event.SETTLED, "dwelling"),
    (Event.HOLD, "holding"),
    (Event.RESUME, "centring"),
    (Event.CENTRED, "stepping"),
    (Event.STEPPED, "settling"),
    (Event.SETTLED, "dwelling"),
    (Event.DWELT, "reading"),
    (Event.RECENTRE, "centring"),
    (Event.CENTRED, "stepping"),
    (Event.STEPPED, "settling"),
    (Event.SETTLED, "dwelling"),
    (Event.DWELT, "reading"),
    (Event.FINISH, "parking"),
    (Event.CONFIRMED, "parked"),
]


def test_the_states_are_the_words_of_the_design() -> None:
    words = (
        "parked proving ready energising conditioning stepping settling dwelling reading centring "
        "holding parking tripped unconfirmed"
    )
    assert {state.value for state in State} == set(words.split())


@pytest.mark.parametrize(("state", "event"), list(itertools.product(State, Event)))
def test_every_pair_leads_where_the_table_says_or_is_refused_unchanged(state: State, event: Event) -> None:
    machine = RunMachine(state)
    expected = targets().get((state, event))
    if expected is None:
        with pytest.raises(IllegalEvent, match=f"{state.value} does not answer the event {event.value}"):
            machine.fire(event)
        assert machine.state is state
    else:
        assert machine.fire(event) is expected
        assert machine.state is expected


def test_a_plain_run_walks_the_states_in_order() -> None:
    machine = RunMachine()
    for event, word in PLAIN_RUN:
        assert machine.fire(event).value == word


def test_a_trip_is_answered_everywhere_and_never_leads_to_an_energised_state() -> None:
    for state in STATES:
        assert RunMachine(state).fire(Event.TRIP) in (State.TRIPPED, State.UNCONFIRMED)


def test_from_a_trip_only_parking_follows() -> None:
    answered = {event for (state, event) in targets() if state is State.TRIPPED}
    assert answered == {Event.TRIP, Event.PARK}
    assert RunMachine(State.TRIPPED).fire(Event.PARK) is State.PARKING


def test_no_path_from_parking_energises_without_proof_and_start() -> None:
    """Cut the proof and the start out of the table: nothing energised is then reachable."""
    energised = {State.ENERGISING, *WORKING, State.HOLDING}
    for cut in (Event.PROVE, Event.PROVED, Event.START):
        reached, frontier = {State.PARKED}, [State.PARKED]
        while frontier:
            here = frontier.pop()
            for (source, event), target in targets().items():
                if source is here and event is not cut and target not in reached:
                    reached.add(target)
                    frontier.append(target)
        assert not reached & energised, cut


def test_stop_parks_from_every_state_that_may_be_energised() -> None:
    for state in STOPPABLE:
        assert RunMachine(state).fire(Event.STOP) is State.PARKING


def test_there_are_no_automatic_triggers() -> None:
    machine = RunMachine()
    assert not [name for name in dir(machine) if name.startswith("to_")]


def test_the_page_in_the_docs_is_the_table() -> None:
    assert (DOCS / "state-machine.md").read_text(encoding="utf-8") == page()
