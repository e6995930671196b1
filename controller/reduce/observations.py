"""The detector rows of a run as columns, and which of them may be used.

A *gate* is one row; the gates of one visit to a stop form a *dwell*, known by block, cycle and stop.
A marked gate marks its dwell: the dwell stays listed and is not used. Marks are hardware's or the
run's own words (late, trip, overrange, ...), never a statistical opinion about the value.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from controller.record.journal import DetectorRow

# Marks that are told and do not bar a dwell: the station kept an older centre.
ADVISORY = ("uncentred",)
NS_PER_SECOND = 1e9


class Stop(NamedTuple):
    """An ion or a background position as the rows know it; mass_to_charge in u."""

    label: str
    kind: str
    station: str
    detector: str
    mass_to_charge: float


class MarkedDwell(NamedTuple):
    """A dwell that is kept and not used, and why."""

    block: int
    cycle: int
    stop: str
    marks: str


@dataclass(frozen=True, slots=True)
class Observations:
    """Gates and dwells as equal-length arrays; times in s from the first gate."""

    gate_total: NDArray[np.float64]  # pulses, or V s
    gate_live: NDArray[np.float64]  # s
    gate_dwell: NDArray[np.intp]  # index into the dwells
    block: NDArray[np.intp]
    cycle: NDArray[np.intp]
    stop: NDArray[np.intp]  # index into stops
    mid: NDArray[np.float64]  # s, live-weighted middle of the dwell
    span: NDArray[np.float64]  # s, first opening to last closing
    live: NDArray[np.float64]  # s, summed over the gates
    marks: tuple[str, ...]  # "" when clean
    stops: tuple[Stop, ...]

    @property
    def blocks(self) -> int:
        return int(self.block.max()) + 1 if len(self.block) else 0


@dataclass(slots=True)
class _Dwell:
    started_ns: int
    ended_ns: int
    live: float
    live_mid: float  # integral of mid-gate time over live time, s2
    marks: dict[str, None]  # in the order of appearance


def collect(rows: Iterable[DetectorRow]) -> Observations:
    """Sort rows into dwells. Rows of kind "centring" are left out."""
    codes: dict[tuple[str, str, str, str], int] = {}
    stops: list[Stop] = []
    dwells: dict[tuple[int, int, int], tuple[int, _Dwell]] = {}
    total: list[float] = []
    live: list[float] = []
    owner: list[int] = []
    origin_ns: int | None = None
    for row in rows:
        if row.kind == "centring":
            continue
        if origin_ns is None:
            origin_ns = row.started_ns
        place = (row.stop, row.kind, row.station, row.detector)
        code = codes.setdefault(place, len(stops))
        if code == len(stops):
            stops.append(Stop(*place, row.mass_to_charge))
        key = (row.block, row.cycle, code)
        if key not in dwells:
            dwells[key] = (len(dwells), _Dwell(row.started_ns, row.ended_ns, 0.0, 0.0, {}))
        index, dwell = dwells[key]
        mid_ns = (row.started_ns + row.ended_ns) / 2 - origin_ns
        dwell.ended_ns = max(dwell.ended_ns, row.ended_ns)
        dwell.live += row.live_seconds
        dwell.live_mid += row.live_seconds * mid_ns / NS_PER_SECOND
        dwell.marks.update(dict.fromkeys(_marks(row)))
        total.append(row.total)
        live.append(row.live_seconds)
        owner.append(index)
    found = [dwell for _, dwell in dwells.values()]
    keys = np.array(list(dwells), dtype=np.intp).reshape(-1, 3)
    return Observations(
        gate_total=np.array(total),
        gate_live=np.array(live),
        gate_dwell=np.array(owner, dtype=np.intp),
        block=keys[:, 0],
        cycle=keys[:, 1],
        stop=keys[:, 2],
        mid=np.array([d.live_mid / d.live if d.live > 0 else 0.0 for d in found]),
        span=np.array([(d.ended_ns - d.started_ns) / NS_PER_SECOND for d in found]),
        live=np.array([d.live for d in found]),
        marks=tuple(" ".join(d.marks) for d in found),
        stops=tuple(stops),
    )


def _marks(row: DetectorRow) -> list[str]:
    marks = row.flags.split()
    if row.overrange and "overrange" not in marks:
        marks.append("overrange")
    if not row.live_seconds > 0:
        marks.append("no-live-time")
    return marks


def barred(marks: str) -> bool:
    """Whether a dwell with these marks must not be used."""
    return any(mark not in ADVISORY for mark in marks.split())
