"""Draws the state machine's table as a Mermaid page for the docs: ``make docs``."""

from __future__ import annotations

import sys
from pathlib import Path

from controller.run.machine import STATES, TRANSITIONS, Event, State

HEAD = """# The run's state machine

Drawn from the table in `controller/run/machine.py` by `make docs`; a test compares this page with it.
Every state also answers `trip` (to `tripped`; `unconfirmed` stays), left out of the drawing.

"""


def mermaid() -> str:
    """The table as a Mermaid state diagram, one arrow for each pair of states."""
    arrows: dict[tuple[State, State], list[str]] = {}
    for event, source, target in TRANSITIONS:
        if event is not Event.TRIP:
            arrows.setdefault((source, target), []).append(event.value)
    lines = ["stateDiagram-v2", "    [*] --> parked"]
    lines += [
        f"    {source.value} --> {target.value}: {' / '.join(events)}"
        for (source, target), events in arrows.items()
    ]
    return "\n".join(lines)


def table() -> str:
    """Every (state, event) pair, with the state it leads to or a dash."""
    answer = {(source, event): target for event, source, target in TRANSITIONS}
    lines = ["| event | " + " | ".join(state.value for state in STATES) + " |"]
    lines.append("|---" * (len(STATES) + 1) + "|")
    for event in Event:
        cells = (answer.get((state, event)) for state in STATES)
        lines.append(f"| {event.value} | " + " | ".join(cell.value if cell else "-" for cell in cells) + " |")
    return "\n".join(lines)


def page() -> str:
    second = "## Every state and event\n\nA dash is refused, and leaves the state unchanged."
    return f"{HEAD}```mermaid\n{mermaid()}\n```\n\n{second}\n\n{table()}\n"


if __name__ == "__main__":
    Path(sys.argv[1]).write_text(page(), encoding="utf-8")
