"""What follows a cause: latch, act on every output, and only then write and tell.

Acting means starting one task per output; the loop is given one turn so that every command has left
before a line is written. The outcome of the commands is judged by read-back, at later ticks.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

from controller.errors import ExitCode
from controller.record.journal import Journal
from controller.safety.board import Board
from controller.safety.interlocks import TABLE, effects_of, outranks
from controller.safety.lowering import Lowering
from controller.safety.safestate import latch, unknown
from controller.safety.values import (
    ACCELERATING,
    DETECTOR,
    ESA,
    MAGNET,
    OUTPUTS,
    PERMIT,
    SOURCE,
    Cause,
    Effect,
)
from controller.safety.words import describe

# Ions first, then what they could hurt; the permit line with the first, where the row asks for it.
ACT_ORDER = (PERMIT, SOURCE, DETECTOR, ACCELERATING, ESA, MAGNET)
EXIT_CODES = {"13": ExitCode.RECORD_AT_RISK, "12a": ExitCode.STOPPED, "12b": ExitCode.INTERNAL_FAULT}
NOTHING = (Effect.NONE,) * len(OUTPUTS)


class SupervisorEvent(NamedTuple):
    """What the listener is told, after the outputs have been acted on."""

    kind: str  # "trip" the first-out | "cause" a later one | "stop"
    cause: Cause
    text: str
    exit_code: ExitCode


Listener = Callable[[SupervisorEvent], None]


class Reflex:
    """Turns the causes of a tick into effects on the outputs."""

    def __init__(self, board: Board, lowering: Lowering, journal: Journal) -> None:
        self._board, self._lowering, self._journal = board, lowering, journal
        self._applied = NOTHING
        self.listener: Listener | None = None

    def clear(self) -> None:
        """Forget what was applied, after a reset."""
        self._applied = NOTHING
        self._lowering.forget()

    def act(self, present: tuple[Cause, ...], at_ns: int) -> tuple[Cause, ...]:
        """Latch what is new and do what all causes together ask for.

        Returns the new causes; the caller gives the loop one turn, in which the commands leave, and
        then lets each be said.
        """
        board = self._board
        new = unknown(board.latches, present)
        if new:
            # a stop does not latch, but it takes the start back like a trip
            board.replace(latch(board.latches, new)._replace(started=False))
        passing = tuple(cause for cause in new if not TABLE[cause.row].latched)
        effects = effects_of(board.latches.causes + passing, at_ns)
        for output in ACT_ORDER:
            if new or outranks(output, effects[output], self._applied[output]):
                self._lowering.apply(output, effects[output])
        self._applied = effects
        return new

    def say(self, cause: Cause) -> None:
        """Write a new cause into the record and tell the listener."""
        text, first = describe(cause), self._board.latches.first_out
        kind = "cause"
        if not TABLE[cause.row].latched:
            kind = "stop"
        elif first is not None and cause.id == first.id:
            kind = "trip"
        severity = "info" if kind == "stop" else "trip"
        data = {"id": cause.id, "serves": cause.serves}
        self._journal.event(cause.at_ns, severity, kind, cause.source, text, data)
        if self.listener is not None:
            exit_code = EXIT_CODES.get(cause.row, ExitCode.TRIPPED)
            self.listener(SupervisorEvent(kind, cause, text, exit_code))
