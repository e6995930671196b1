"""The nouns of the safety kernel: values in, verdicts out.

Theory
------
The kernel is four files (values, interlocks, guard, safestate). It is pure: no await, no I/O, no
clock, no logging, no randomness, no globals that change. Time comes in as integer nanoseconds of the
monotonic clock; only differences of it are ever used. It is total: it never raises for what the plant
or an operator can do, and never returns None.

What it refuses to know: devices, links, drivers' names, the sequence, the state machine, files, wall
time. An output is a number between 0 and 5, a sensor is a slot in a tuple.

Standing rules:

* A reading that is BAD, ABSENT, older than its limit or from the future is *not usable*, and whatever
  condition it serves counts as violated. Nothing is ever read from its value.
* A *demand* is the last set-point that the guard permitted (gates: 1 open, 0 shut). It is known even
  when the device is silent; ``nan`` means that nobody knows it (before proving).
* Effects are ordered; of several causes the most de-energising acts. Only the magnet differs: for it
  a ramp outranks an abrupt disconnection, because opening an inductor makes voltage.
* Verdicts, causes and latches are immutable; whoever holds them replaces them whole.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum, IntEnum
from math import isfinite, nan
from typing import NamedTuple

from drivers.contract import Reading

# In the order of the columns of the cause-and-effect table; the permit line comes last.
OUTPUTS = ("accelerating", "esa", "magnet", "detector", "source", "permit")
ACCELERATING, ESA, MAGNET, DETECTOR, SOURCE, PERMIT = range(6)
HIGH_VOLTAGE = (ACCELERATING, ESA, DETECTOR)
SUPPLIES = (ACCELERATING, ESA, MAGNET, DETECTOR)
INDEX = {name: number for number, name in enumerate(OUTPUTS)}


class Action(Enum):
    """What may be asked of an output."""

    WRITE = "write"
    ENABLE = "enable"
    DISABLE = "disable"


class Effect(IntEnum):
    """What a cause does to an output; the larger, the more de-energising."""

    NONE = 0
    BLOCK = 1  # refuse what energises, leave the output as it is
    HOLD = 2  # freeze
    RAMP = 3  # to zero at the safe slope, then disable
    OFF = 4  # zero and disable at once


class Request(NamedTuple):
    """One thing asked of one output at one instant. ``value`` in the output's SI unit."""

    output: str
    action: Action
    value: float
    at_ns: int


class Cause(NamedTuple):
    """One violated condition, as found. ``row`` is its row of the cause-and-effect table.

    ``serves`` is the row whose effects apply: for a stale or bad sensor, the row it serves.
    """

    id: str  # "row:source", what a reset must name
    row: str
    serves: str
    priority: int
    source: str
    value: float  # nan where there is none
    limit: float  # nan where there is none
    age_ns: int  # -1 where there is none
    at_ns: int
    detail: str


@dataclass(frozen=True, slots=True)
class Verdict:
    """What the guard answers: why, the value and the limit compared, the age of the reading used.

    ``value`` and ``limit`` are nan, and ``age_ns`` is -1, where the reason has none; ``row`` names the
    row of the cause-and-effect table that a trip answers for.
    """

    reason: str
    value: float = nan
    limit: float = nan
    age_ns: int = -1
    row: str = ""

    def text(self) -> str:
        """One line for a person."""
        return said(self.reason, self.value, self.limit, self.age_ns)


class Permit(Verdict):
    """Yes."""

    __slots__ = ()


class Refusal(Verdict):
    """No, and nothing else changes."""

    __slots__ = ()


class Trip(Verdict):
    """No, because a condition needed to continue is lost: the outputs are being brought to zero."""

    __slots__ = ()


def said(head: str, value: float, limit: float, age_ns: int) -> str:
    """One line: what, the value, the limit and the age, as far as there are any."""
    parts = [head] + [f"{name} {x:.6g}" for name, x in (("value", value), ("limit", limit)) if isfinite(x)]
    return ", ".join(parts + ([f"age {age_ns / 1e9:.3f} s"] if age_ns >= 0 else []))


class Snapshot(NamedTuple):
    """Everything a tick judges, frozen. ``readings`` follow the envelope's channels."""

    tick: int
    at_ns: int
    readings: tuple[Reading, ...]
    demands: tuple[float, ...]  # per output
    live: bool  # started, or anything enabled or demanded: interlocks then trip, else only forbid
    posted: tuple[tuple[str, str, str], ...]  # (row, source, detail) reported from outside


class Latches(NamedTuple):
    """What the kernel must remember from one request and one trip to the next."""

    first_out: Cause | None
    causes: tuple[Cause, ...]
    started: bool  # the explicit start was given, and no trip or stop has taken it back
    proven: tuple[bool, ...]  # per output: identified, limits read back
    enabled: tuple[bool, ...]
    demands: tuple[float, ...]
    permitted_ns: tuple[int, ...]  # when the demand was last permitted; -1 never
    held: tuple[int, ...]  # per bound: since when its permissive holds; -1 it does not
    confirmed: bool  # the safe state was confirmed since the last trip


class Bound(NamedTuple):
    """A channel with the range that permits a start and the wider one whose loss trips."""

    source: str  # channel name
    row: str
    slot: int
    permit_low: float
    permit_high: float
    trip_low: float
    trip_high: float
    stale_ns: int
    debounce_ns: int


class TrackLimits(NamedTuple):
    """A read-back that must lie where its output's demand has been of late, within a band."""

    source: str
    output: int
    slot: int
    scale: float  # read-back times scale is in the demand's unit
    band: float
    band_fraction: float  # of the demand
    window_ns: int  # the demand's extremes are remembered for one to two windows
    below_ns: int  # outside for this long before it is a cause
    above_ns: int
    decay_ns: float  # twice the expected decay constant once demanded lower; 0: it does not decay
    fall_per_ns: float  # half the slope at which a supply may walk down by itself
    stale_ns: int
    below_row: str
    above_row: str


class OutputLimits(NamedTuple):
    """The envelope of one output, in its SI unit."""

    maximum: float
    per_second: float  # upward slope; for the magnet in both directions
    step: float  # largest single change
    safe: float  # read-back below which it counts as off
    decay_seconds: float  # expected decay constant once off
    read_slots: tuple[int, ...]  # read-backs
    set_slot: int  # set-point as the device holds it; -1 none
    status_slot: int  # -1 none
    stale_ns: int
    bounds: tuple[int, ...]  # the conditions it needs: those whose loss would de-energise it


class Envelope(NamedTuple):
    """All limits of one instrument. Built once, never changed."""

    channels: tuple[str, ...]
    outputs: tuple[OutputLimits, ...]
    bounds: tuple[Bound, ...]
    tracks: tuple[TrackLimits, ...]
    statuses: tuple[tuple[str, int, int], ...]  # (source, slot, stale_ns) of the supplies' status
    checks: tuple[tuple[int, float, float, int], ...]  # the bounds' (slot, low, high, stale), for speed
    status_slots: tuple[int, ...]
    covers: tuple[int, int]  # the two bounds of the cover
    disagree_ns: int
    esa_ratio: float  # U = esa_ratio * V
    esa_part_volts: float  # largest |U - esa_ratio V| that a raise may leave
    analyser_bound: int
    analyser_hold_ns: int  # before detector volts may rise
    cover_hold_ns: int
    emergency_bound: int


def usable(reading: Reading, at_ns: int, stale_ns: int) -> bool:
    """Whether a reading may be believed at ``at_ns``: good, and neither stale nor from the future."""
    return not reading[1] and 0 <= at_ns - reading[2] <= stale_ns and isfinite(reading[0])
