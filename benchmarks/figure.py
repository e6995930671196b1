"""One figure of the results page."""

from __future__ import annotations

from typing import NamedTuple


class Figure(NamedTuple):
    """What was measured, on both sides, and what was asked for."""

    name: str
    ours: str
    against: str
    ratio: str
    goal: str
    met: bool
    note: str = ""


def page(figures: list[Figure], machine: str) -> str:
    """The results as one Markdown page."""
    lines = [
        "# Measured figures",
        "",
        "Written by `make bench`; both sides of every ratio were measured in the same run.",
        f"Machine: {machine}.",
        "",
        "| figure | ours | against | ratio | goal | met |",
        "|---|---|---|---|---|---|",
    ]
    lines += [
        f"| {f.name} | {f.ours} | {f.against} | {f.ratio} | {f.goal} | {'yes' if f.met else 'NO'} |"
        for f in figures
    ]
    lines.append("")
    lines += [f"- {f.name}: {f.note}" for f in figures if f.note]
    return "\n".join(lines) + "\n"
