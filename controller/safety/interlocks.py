"""What makes a running instrument stop: the cause-and-effect table, and the judge of one tick.

Theory
------
Three kinds of condition are judged, each a compare on a slot of the snapshot:

* a *bound*: a channel must lie in a range. Outside the inner (permit) range nothing may be started;
  outside the outer (trip) range for the debounce time, what it guards is de-energised;
* a *track*: a read-back must lie where its output's demand has been during the last one to two
  windows, within a band. So a ramp needs no timer that a steady stream of small set-points could hold
  off for ever. A lowered output may lag behind by its own fall, at half the expected speed;
* a *status*: a supply must be in remote control and not tripped.

A value that is not usable violates its condition, and acts as the row that the sensor serves. A
condition trips only while the instrument is live; before that it merely forbids the start. Causes
reported from outside (a stop, a fault of the record, a failed command) always count; one whose row is
not in the table counts as an internal fault.

``judge_tick`` first runs a pass that can only say "all is well"; everything else is the slow pass's
business, which alone defines the result. Memory is a value: since when each condition holds.
"""

from __future__ import annotations

from math import exp, inf, isnan, nan
from typing import NamedTuple

from controller.safety.values import (
    HIGH_VOLTAGE,
    INDEX,
    MAGNET,
    OUTPUTS,
    PERMIT,
    Bound,
    Cause,
    Effect,
    Envelope,
    Snapshot,
    TrackLimits,
    usable,
)
from drivers.contract import Quality, Reading

NONE, BLOCK, HOLD, RAMP, OFF = Effect
NS = 1_000_000_000
FOREVER = 2**62
NEAR = 0.125  # of the band: what a regulator trims must not cost a slow pass at every tick


class Row(NamedTuple):
    """One row of the table. Effects in the order accelerating, ESA, magnet, detector, source."""

    id: str
    effects: tuple[Effect, ...]
    escape: bool  # also drop the software permit line
    latched: bool
    hold_seconds: float  # HOLD becomes RAMP after this; 0: it stays HOLD
    reset_seconds: float  # the cause must have been gone for this long


# Rows in the order of priority of the first-out. Their words are in ``words.py``.
ROWS: tuple[Row, ...] = (
    Row("11", (OFF, OFF, OFF, OFF, OFF), False, True, 0, 5),
    Row("1", (OFF, OFF, RAMP, OFF, OFF), True, True, 0, 5),
    Row("1b", (OFF, OFF, RAMP, OFF, OFF), True, True, 0, 5),
    Row("2", (RAMP, RAMP, RAMP, RAMP, OFF), False, True, 0, 60),
    Row("3", (HOLD, HOLD, RAMP, HOLD, HOLD), False, True, 30, 600),
    Row("4a", (OFF, OFF, NONE, OFF, OFF), False, True, 0, 60),
    Row("4b", (OFF, OFF, NONE, OFF, OFF), False, True, 0, 60),
    Row("5", (OFF, OFF, NONE, OFF, OFF), False, True, 0, 60),
    Row("6a", (RAMP, RAMP, HOLD, RAMP, RAMP), False, True, 2, 0),
    Row("6b", (OFF, OFF, RAMP, OFF, OFF), True, True, 0, 0),
    Row("7", (OFF, RAMP, RAMP, OFF, OFF), False, True, 0, 10),
    Row("8", (RAMP, RAMP, RAMP, RAMP, RAMP), False, True, 0, 10),
    Row("9", (RAMP, RAMP, RAMP, RAMP, RAMP), False, True, 0, 10),
    Row("10", (HOLD, HOLD, HOLD, OFF, OFF), False, True, 0, 10),
    Row("12a", (RAMP, RAMP, RAMP, RAMP, RAMP), False, False, 0, 0),
    Row("12b", (OFF, OFF, RAMP, OFF, OFF), False, True, 0, 0),
    Row("13", (RAMP, RAMP, RAMP, RAMP, RAMP), False, True, 0, 0),
    Row("15b", (BLOCK, BLOCK, BLOCK, BLOCK, BLOCK), False, True, 0, 0),
    Row("17", (OFF, OFF, RAMP, OFF, OFF), False, True, 0, 0),
    Row("18", (RAMP, RAMP, RAMP, RAMP, RAMP), False, True, 0, 10),
    Row("19", (OFF, OFF, NONE, OFF, OFF), True, True, 0, 0),
    Row("20", (RAMP, RAMP, RAMP, RAMP, RAMP), False, True, 0, 60),
)
PRIORITY = {row.id: number for number, row in enumerate(ROWS)}
TABLE = {row.id: row for row in ROWS}

# Status values of a supply in remote control (2) that has not tripped (4); docs/telegrams.md.
HEALTHY = frozenset(float(status) for status in range(32) if status & 6 == 2)


class Track(NamedTuple):
    """What is remembered of one track. ``low`` and ``high`` are in the read-back's own unit."""

    slot: int
    stale_ns: int
    output: int
    demand: float
    near: float  # a demand that has moved by no more is the same demand
    until_ns: int  # end of the window under way
    low: float
    high: float
    old_low: float  # demand's extremes in the window before, and in this one
    old_high: float
    new_low: float
    new_high: float
    fell_from: float  # where the read-back may still have been when the demand was last lowered
    fell_ns: int
    out_ns: int  # outside since; -1 inside


class Memory(NamedTuple):
    """Since when each condition holds or is violated (-1: it is not)."""

    held: tuple[int, ...]
    bad: tuple[int, ...]
    tracks: tuple[Track, ...]
    edges: tuple[tuple[int, int, int, float, float, int, float, float], ...]  # the tracks, for speed
    calm: bool  # all held, nothing pending


def fresh_memory(envelope: Envelope) -> Memory:
    """The memory before the first tick: nothing holds yet."""
    none = (-1,) * len(envelope.bounds)
    track = Track(0, 0, 0, nan, 0.0, 0, -inf, inf, nan, nan, nan, nan, 0.0, 0, -1)
    tracks = tuple(track._replace(slot=t.slot, stale_ns=t.stale_ns, output=t.output) for t in envelope.tracks)
    return _memory(none, none, tracks)


def _memory(held: tuple[int, ...], bad: tuple[int, ...], tracks: tuple[Track, ...]) -> Memory:
    calm = -1 not in held and max(bad) < 0 and all(track.out_ns < 0 for track in tracks)
    edges = tuple(
        (t.slot, t.stale_ns, t.output, t.demand - t.near, t.demand + t.near, t.until_ns, t.low, t.high)
        for t in tracks
    )
    return Memory(held, bad, tracks, edges, calm)


def judge_tick(envelope: Envelope, snapshot: Snapshot, memory: Memory) -> tuple[Memory, tuple[Cause, ...]]:
    """The causes present in ``snapshot``, in order of priority, and the memory for the next tick."""
    if snapshot[5] or not memory.calm:
        return judge_closely(envelope, snapshot, memory)
    at, readings, demands = snapshot[1], snapshot[2], snapshot[3]
    for slot, low, high, stale in envelope.checks:
        reading = readings[slot]
        if reading[1] or not low <= reading[0] <= high or not 0 <= at - reading[2] <= stale:
            return judge_closely(envelope, snapshot, memory)
    for slot in envelope.status_slots:
        reading = readings[slot]
        if reading[1] or reading[0] not in HEALTHY:
            return judge_closely(envelope, snapshot, memory)
    for slot, stale, output, least, most, until, low, high in memory.edges:
        reading = readings[slot]
        if reading[1] or not low <= reading[0] <= high or not 0 <= at - reading[2] <= stale:
            return judge_closely(envelope, snapshot, memory)
        if not least <= demands[output] <= most or at >= until:
            return judge_closely(envelope, snapshot, memory)
    return memory, ()


def judge_closely(envelope: Envelope, snapshot: Snapshot, memory: Memory) -> tuple[Memory, tuple[Cause, ...]]:
    """The slow pass, which defines the result."""
    causes: list[Cause] = []
    held, bad = _judge_bounds(envelope, snapshot, memory, causes)
    tracks = tuple(
        _judge_track(limits, track, snapshot, causes)
        for limits, track in zip(envelope.tracks, memory.tracks, strict=True)
    )
    at = snapshot.at_ns
    for source, slot, stale in envelope.statuses if snapshot.live else ():
        reading = snapshot.readings[slot]
        if not usable(reading, at, stale):
            causes.append(_unusable(source, "7", reading, at, stale))
        elif reading.value not in HEALTHY:
            tripped = int(reading.value) & 4
            causes.append(_cause("5" if tripped else "18", source, reading, at, nan))
    for row, source, detail in snapshot.posted:
        known = row if row in TABLE else "12b"
        rank = PRIORITY[known]
        causes.append(Cause(f"{known}:{source}", known, known, rank, source, nan, nan, -1, at, detail))
    causes.sort(key=lambda cause: cause.priority)
    return _memory(held, bad, tracks), tuple(causes)


def _judge_bounds(
    envelope: Envelope, snapshot: Snapshot, memory: Memory, causes: list[Cause]
) -> tuple[tuple[int, ...], tuple[int, ...]]:
    at, readings = snapshot.at_ns, snapshot.readings
    held, bad = list(memory.held), list(memory.bad)
    for number, bound in enumerate(envelope.bounds):
        reading = readings[bound.slot]
        believed = usable(reading, at, bound.stale_ns)
        if believed and bound.permit_low <= reading.value <= bound.permit_high:
            held[number] = at if held[number] < 0 else held[number]
            bad[number] = -1
            continue
        held[number] = -1
        if believed and bound.trip_low <= reading.value <= bound.trip_high:
            bad[number] = -1
            continue
        bad[number] = at if bad[number] < 0 else bad[number]
        if not snapshot.live:
            continue
        if not believed:
            causes.append(_unusable(bound.source, bound.row, reading, at, bound.stale_ns))
        elif at - bad[number] >= bound.debounce_ns:
            limit = bound.trip_low if reading.value < bound.trip_low else bound.trip_high
            causes.append(_cause(bound.row, bound.source, reading, at, limit))
    _judge_disagreement(envelope, snapshot, bad, causes)
    return tuple(held), tuple(bad)


def _judge_disagreement(envelope: Envelope, snapshot: Snapshot, bad: list[int], causes: list[Cause]) -> None:
    """Row 1b: one channel of the cover says open and the other shut, for longer than wires take."""
    a, b = envelope.covers
    one = a if bad[b] < 0 else b
    if snapshot.live and (bad[a] < 0) != (bad[b] < 0) and snapshot.at_ns - bad[one] >= envelope.disagree_ns:
        bound: Bound = envelope.bounds[one]
        causes.append(_cause("1b", bound.source, snapshot.readings[bound.slot], snapshot.at_ns, 1.0))


def _judge_track(limits: TrackLimits, track: Track, snapshot: Snapshot, causes: list[Cause]) -> Track:
    at, demand = snapshot.at_ns, snapshot.demands[limits.output]
    reading = snapshot.readings[limits.slot]
    believed = usable(reading, at, limits.stale_ns)
    if not believed and snapshot.live:
        causes.append(_unusable(limits.source, "7", reading, at, limits.stale_ns))
    if isnan(demand):  # nobody knows it yet: proving comes first
        return track._replace(demand=demand, until_ns=at, out_ns=-1, low=-inf, high=inf)
    track = _follow(limits, track, at, demand)
    lowest, highest = min(track.old_low, track.new_low), max(track.old_high, track.new_high)
    band = _band(limits, max(abs(lowest), abs(highest)))
    left = _decayed(limits, track, at)
    value = reading.value * limits.scale
    if not believed or lowest - band <= value <= max(highest, left) + band:
        return track if track.out_ns < 0 else track._replace(out_ns=-1)
    below = value < lowest
    out = track.out_ns if track.out_ns >= 0 else at
    arc = below and limits.output in HIGH_VOLTAGE and value < 0.8 * lowest - band
    if arc:
        row = "5"  # volts collapsed by more than a fifth from one sample to the next
    elif below:
        row = limits.below_row
    else:
        row = "19" if limits.decay_ns > 0 and left > highest + band else limits.above_row
    if arc or at - out >= (limits.below_ns if below else limits.above_ns):
        edge = (lowest - band if below else max(highest, left) + band) / limits.scale
        cause = _cause(row, limits.source, reading, at, edge)
        causes.append(cause._replace(detail=f"demand {demand:.6g}"))
    return track._replace(out_ns=out)


def _follow(limits: TrackLimits, track: Track, at: int, demand: float) -> Track:
    """Take a new demand or a new window into the track's extremes."""
    if abs(demand - track.demand) <= track.near and at < track.until_ns:
        return track
    old, new = (track.old_low, track.old_high), (track.new_low, track.new_high)
    until, fell_from, fell_ns = track.until_ns, track.fell_from, track.fell_ns
    if isnan(track.demand):  # the first that is known
        old = new = (demand, demand)
        fell_from, fell_ns = demand, at
    else:
        if demand < track.demand:
            fell_from, fell_ns = max(old[1], new[1], _decayed(limits, track, at)), at
        if at >= until:
            old, new = new, (track.demand, track.demand)
        new = (min(new[0], demand), max(new[1], demand))
    lowest, highest = min(old[0], new[0]), max(old[1], new[1])
    if lowest == highest:
        until = FOREVER  # nothing to forget
    elif at >= until or until == FOREVER:
        until = at + limits.window_ns
    band = _band(limits, max(abs(lowest), abs(highest)))
    edges = (lowest - band) / limits.scale, (highest + band) / limits.scale
    return Track(
        track.slot, track.stale_ns, track.output, demand, limits.band * NEAR, until, min(edges), max(edges),
        *old, *new, fell_from, fell_ns, track.out_ns,
    )  # fmt: skip


def _band(limits: TrackLimits, demand: float) -> float:
    return max(limits.band, limits.band_fraction * demand)


def _decayed(limits: TrackLimits, track: Track, at: int) -> float:
    """The most that a slow but plausible fall can have left of what was there: a decay through the
    bleeder, or a supply that walks down at its own slope, each at half its speed."""
    if limits.decay_ns <= 0 or track.fell_from <= track.demand:
        return track.demand
    since, height = at - track.fell_ns, track.fell_from - track.demand
    return track.demand + max(height * exp(-since / limits.decay_ns), height - limits.fall_per_ns * since)


def _unusable(source: str, serves: str, reading: Reading, at: int, stale_ns: int) -> Cause:
    """Row 7 for an output's own device; else row 9 for a bad reply and row 8 for silence."""
    age = at - reading.at_ns if reading.at_ns >= 0 else -1
    if source.partition(".")[0] in INDEX:
        row = serves = "7"
    else:
        row = "9" if reading.quality is Quality.BAD else "8"
    limit = stale_ns / NS
    return Cause(
        f"{row}:{source}", row, serves, PRIORITY[row], source, age / NS, limit, age, at, reading.detail
    )


def _cause(row: str, source: str, reading: Reading, at: int, limit: float) -> Cause:
    age = at - reading.at_ns
    return Cause(f"{row}:{source}", row, row, PRIORITY[row], source, reading.value, limit, age, at, "")


def outranks(output: int, one: Effect, other: Effect) -> bool:
    """Whether ``one`` de-energises ``output`` more than ``other``; the magnet prefers its ramp."""
    if output == MAGNET and {one, other} == {RAMP, OFF}:
        return one is RAMP
    return one > other


def effects_of(causes: tuple[Cause, ...], at_ns: int) -> tuple[Effect, ...]:
    """What each output must do for all ``causes`` together, at ``at_ns``."""
    answer = [NONE] * len(OUTPUTS)
    for cause in causes:
        row = TABLE[cause.serves]
        due = row.hold_seconds > 0 and at_ns - cause.at_ns >= row.hold_seconds * NS
        for output, listed in enumerate(row.effects):
            effect = RAMP if due and listed is HOLD else listed
            if outranks(output, effect, answer[output]):
                answer[output] = effect
        # a lost device of the high-voltage chain can only be reached through the permit line
        if row.escape or (cause.row == "7" and cause.source.partition(".")[0] != "magnet"):
            answer[PERMIT] = OFF
    return tuple(answer)
