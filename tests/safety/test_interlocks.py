"""The judge of a tick: the quick pass agrees with the slow one, causes and effects follow the table."""

from __future__ import annotations

import random
from math import inf, isfinite, nan

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from test_guard import (
    CHANNELS,
    DEMANDS,
    ENVELOPE,
    GOOD,
    INSTRUMENT,
    NOW,
    SLOTS,
    SNAPSHOT,
    snapshot_of,
    snapshots,
)

from controller.safety.envelope import build_envelope
from controller.safety.interlocks import (
    NS,
    PRIORITY,
    ROWS,
    TABLE,
    effects_of,
    fresh_memory,
    judge_closely,
    judge_tick,
    outranks,
)
from controller.safety.values import MAGNET, OUTPUTS, PERMIT, Cause, Effect, Snapshot
from drivers.contract import Quality

TICK = 50_000_000


def settle(seconds: float = 1.0, values: dict[str, float] = GOOD):
    """The memory after some seconds of all being well."""
    memory, at = fresh_memory(ENVELOPE), NOW - round(seconds * NS)
    while at < NOW:
        memory, causes = judge_tick(ENVELOPE, snapshot_of(values, at=at), memory)
        assert causes == ()
        at += TICK
    return memory


CALM = settle()


def after(snapshot: Snapshot, seconds: float, memory=CALM, step: int = TICK):
    """Causes found while ``snapshot`` stays as it is, its readings heard anew at each tick."""
    found, at, end = (), snapshot.at_ns, snapshot.at_ns + round(seconds * NS)
    while at <= end:
        readings = tuple(r._replace(at_ns=r.at_ns + at - snapshot.at_ns) for r in snapshot.readings)
        memory, found = judge_tick(ENVELOPE, snapshot._replace(at_ns=at, readings=readings), memory)
        at += step
    return memory, found


def changed(**values: float) -> Snapshot:
    return snapshot_of(GOOD | {name.replace("__", "."): value for name, value in values.items()})


def test_all_well_is_calm() -> None:
    assert CALM.calm
    assert judge_tick(ENVELOPE, SNAPSHOT, CALM) == (CALM, ())


@settings(max_examples=300)
@given(
    st.lists(
        st.tuples(
            snapshots(), st.booleans(), st.sampled_from([0, TICK, 3 * TICK, NS]), st.sampled_from([0, 1, 2])
        ),
        min_size=1, max_size=6,
    )
)  # fmt: skip
def test_the_quick_pass_says_what_the_slow_one_says(ticks) -> None:
    quick = slow = CALM
    at = NOW
    for snapshot, live, gap, move in ticks:
        at += gap
        demands = tuple(d * (1.0, 1.00001, 0.9)[move] for d in DEMANDS)
        shifted = snapshot._replace(
            at_ns=at,
            live=live,
            demands=demands,
            readings=tuple(r._replace(at_ns=r.at_ns + at - NOW) for r in snapshot.readings),
        )
        quick, found = judge_tick(ENVELOPE, shifted, quick)
        slow, expected = judge_closely(ENVELOPE, shifted, slow)
        assert repr(found) == repr(expected)
        assert repr(quick) == repr(slow)


@given(
    snapshots(),
    st.lists(
        st.tuples(st.sampled_from(["1", "13", "??"]), st.text(max_size=2), st.text(max_size=2)), max_size=3
    ),
)
def test_causes_come_in_the_order_of_the_table_and_say_what_they_must(snapshot, posts) -> None:
    _, causes = judge_tick(ENVELOPE, snapshot._replace(posted=tuple(posts)), CALM)
    assert [cause.priority for cause in causes] == sorted(cause.priority for cause in causes)
    for cause in causes:
        assert cause.id == f"{cause.row}:{cause.source}"
        assert cause.row in TABLE
        assert cause.serves in TABLE
        assert PRIORITY[cause.row] == cause.priority
        if cause.source in SLOTS and cause.row in ("1", "2", "3", "4a", "4b", "11", "20"):
            assert isfinite(cause.value)
            assert isfinite(cause.limit)
            assert cause.age_ns >= 0


@given(snapshots(), st.integers(0, 2**32))
def test_the_order_of_the_channels_changes_nothing(snapshot, seed) -> None:
    channels = list(CHANNELS)
    random.Random(seed).shuffle(channels)
    other = build_envelope(INSTRUMENT, channels)
    memory = fresh_memory(other)
    for at in range(NOW - NS, NOW, TICK):
        plain = snapshot_of(GOOD, at=at)
        moved = plain._replace(readings=tuple(plain.readings[SLOTS[c.name]] for c in channels))
        memory, _ = judge_tick(other, moved, memory)
    moved = snapshot._replace(readings=tuple(snapshot.readings[SLOTS[c.name]] for c in channels))
    assert repr(judge_tick(other, moved, memory)[1]) == repr(judge_tick(ENVELOPE, snapshot, CALM)[1])


CONDITIONS = [  # channel, value, row, seconds after which it is a cause (0: at once)
    ("interlocks.emergency_stop", 0.0, "11", 0.0),
    ("interlocks.cover_a", 0.0, "1", 0.0),
    ("interlocks.cover_b", 0.5, "1", 0.0),
    ("water.flow", 4.9e-5, "2", 2.0),
    ("water.switch", 0.0, "2", 2.0),
    ("interlocks.thermostat", 0.0, "3", 1.0),
    ("magnet.coil_kelvin", 349.0, "3", 1.0),
    ("source_gauge.pascals", 1.1e-2, "4a", 0.0),
    ("analyser_gauge.pascals", 1.1e-3, "4b", 0.0),
    ("accelerating.amps", 3e-3, "5", 0.0),
    ("esa.amps", 3e-3, "5", 0.0),
    ("detector.amps", 1e-3, "5", 0.0),
    ("accelerating.status", 7.0, "5", 0.0),
    ("accelerating.status", 1.0, "18", 0.0),
    ("accelerating.volts", 3000.0, "5", 0.0),  # collapsed by a quarter
    ("accelerating.volts", 3900.0, "6a", 0.5),
    ("accelerating.volts", 4100.0, "6b", 0.1),
    ("esa.inner_volts", -250.0, "6b", 0.1),
    ("detector.volts", 900.0, "6a", 0.5),
    ("magnet.amps", 2.9, "6a", 1.0),
    ("magnet.amps", 3.1, "6b", 1.0),
    ("source.open", 0.0, "6a", 0.2),
    ("permit.echo", 0.0, "1b", 0.2),
    ("interlocks.mains", 0.0, "20", 5.0),
]


@pytest.mark.parametrize(("channel", "value", "row", "seconds"), CONDITIONS)
def test_each_condition_trips_after_its_delay_and_not_before(channel, value, row, seconds) -> None:
    snapshot = snapshot_of(GOOD | {channel: value})
    if seconds:
        _, early = after(snapshot, seconds - 0.05)
        assert early == ()
    _, causes = after(snapshot, seconds)
    assert [(cause.row, cause.source) for cause in causes] == [(row, channel)]


@pytest.mark.parametrize(("channel", "value", "row", "seconds"), CONDITIONS)
def test_a_condition_that_recovers_in_time_leaves_no_trace(channel, value, row, seconds) -> None:
    if not seconds:
        return
    memory, _ = after(snapshot_of(GOOD | {channel: value}), seconds - 0.05)
    later = snapshot_of(GOOD, at=NOW + round(seconds * NS))
    _, causes = after(later, 3.0, memory)
    assert causes == ()


@pytest.mark.parametrize("channel", ["interlocks.cover_a", "analyser_gauge.pascals", "magnet.coil_kelvin"])
def test_exactly_at_a_bound_is_inside(channel: str) -> None:
    (bound,) = [b for b in ENVELOPE.bounds if b.source == channel]
    edge = bound.trip_high if bound.trip_high < inf and channel != "interlocks.cover_a" else bound.trip_low
    _, causes = after(snapshot_of(GOOD | {channel: edge}), 3.0)
    assert causes == ()


def test_between_permit_and_trip_it_runs_on_but_may_not_start() -> None:
    memory, causes = after(changed(analyser_gauge__pascals=5e-4), 1.0)
    assert causes == ()
    assert memory.held[ENVELOPE.analyser_bound] == -1


@pytest.mark.parametrize(("channel", "value", "row", "seconds"), CONDITIONS)
def test_before_anything_is_live_only_an_uncommanded_output_counts(channel, value, row, seconds) -> None:
    _, causes = after(snapshot_of(GOOD | {channel: value}, live=False), seconds + 1.0)
    tracked = row in ("6a", "6b", "1b") or value == 3000.0
    assert bool(causes) == tracked


def test_cover_channels_that_disagree_are_row_1b_after_their_delay() -> None:
    _, causes = after(changed(interlocks__cover_a=0.0), 0.05)
    assert [cause.row for cause in causes] == ["1"]
    _, causes = after(changed(interlocks__cover_a=0.0), 0.10)
    assert [cause.row for cause in causes] == ["1", "1b"]
    _, causes = after(changed(interlocks__cover_a=0.0, interlocks__cover_b=0.0), 1.0)
    assert [cause.row for cause in causes] == ["1", "1"]


@pytest.mark.parametrize("quality", [Quality.BAD, Quality.ABSENT])
@pytest.mark.parametrize("slot", range(len(CHANNELS)))
def test_each_channel_that_the_table_knows_counts_when_it_is_not_usable(slot, quality) -> None:
    """Nothing that a condition needs can be lost in silence; the set-points' echoes serve the guard alone."""
    readings = list(SNAPSHOT.readings)
    readings[slot] = readings[slot]._replace(quality=quality)
    _, causes = judge_tick(ENVELOPE, SNAPSHOT._replace(readings=tuple(readings)), CALM)
    name = readings[slot].source
    role, _, quantity = name.partition(".")
    if quantity in ("set_amps", "set_volts", "coil_volts") or name == "source.status":
        assert causes == ()
        return
    (cause,) = causes
    assert cause.source == name
    if role in OUTPUTS:
        assert cause.row == cause.serves == "7"
    else:
        assert cause.row == ("9" if quality is Quality.BAD else "8")
        assert cause.serves in ("1", "2", "3", "4a", "4b", "6a", "10", "11", "20")


def test_a_lowered_output_may_decay_at_half_the_expected_rate_and_no_slower() -> None:
    demands = (0.0, *DEMANDS[1:])
    tau = INSTRUMENT.accelerating.bleed_seconds

    def fall(factor: float) -> list[str]:
        memory, rows = CALM, []
        for number in range(200):
            at = NOW + number * TICK
            volts = 4000.0 * 2.718281828 ** (-number * TICK / NS / (tau * factor))
            snapshot = snapshot_of(GOOD | {"accelerating.volts": volts}, at=at)._replace(demands=demands)
            memory, causes = judge_tick(ENVELOPE, snapshot, memory)
            rows += [cause.row for cause in causes]
        return rows

    assert fall(1.0) == []
    assert fall(1.9) == []
    slow = fall(3.0)
    assert slow[0] == "19"
    assert set(slow) <= {"19", "6b"}  # when it should long be gone, it is simply uncommanded


def test_volts_that_appear_on_an_output_at_zero_are_uncommanded() -> None:
    zero = (0.0, *DEMANDS[1:])
    memory = fresh_memory(ENVELOPE)
    for number in range(20):
        quiet = snapshot_of(GOOD | {"accelerating.volts": 0.0}, at=NOW + number * TICK)._replace(demands=zero)
        memory, causes = judge_tick(ENVELOPE, quiet, memory)
        assert causes == ()
    loud = snapshot_of(GOOD | {"accelerating.volts": 100.0}, at=NOW + NS)._replace(demands=zero)
    _, causes = after(loud, 0.1, memory)
    assert [cause.row for cause in causes] == ["6b"]


def test_what_nobody_has_proven_is_not_compared() -> None:
    unknown = SNAPSHOT._replace(demands=(nan,) * 6, live=False)
    _, causes = after(unknown, 2.0, fresh_memory(ENVELOPE))
    assert causes == ()


# --- effects -----------------------------------------------------------------------------------------

# The cause-and-effect table once more, written by hand from the safety analysis and not from the code:
# accelerating, ESA, magnet, detector, source, permit line dropped (E).
BY_HAND = """
11  OFF  OFF  OFF  OFF  OFF  -
1   OFF  OFF  RAMP OFF  OFF  E
1b  OFF  OFF  RAMP OFF  OFF  E
2   RAMP RAMP RAMP RAMP OFF  -
3   HOLD HOLD RAMP HOLD HOLD -
4a  OFF  OFF  NONE OFF  OFF  -
4b  OFF  OFF  NONE OFF  OFF  -
5   OFF  OFF  NONE OFF  OFF  -
6a  RAMP RAMP HOLD RAMP RAMP -
6b  OFF  OFF  RAMP OFF  OFF  E
7   OFF  RAMP RAMP OFF  OFF  -
8   RAMP RAMP RAMP RAMP RAMP -
9   RAMP RAMP RAMP RAMP RAMP -
10  HOLD HOLD HOLD OFF  OFF  -
12a RAMP RAMP RAMP RAMP RAMP -
12b OFF  OFF  RAMP OFF  OFF  -
13  RAMP RAMP RAMP RAMP RAMP -
15b BLOCK BLOCK BLOCK BLOCK BLOCK -
17  OFF  OFF  RAMP OFF  OFF  -
18  RAMP RAMP RAMP RAMP RAMP -
19  OFF  OFF  NONE OFF  OFF  E
20  RAMP RAMP RAMP RAMP RAMP -
"""


def cause_of(row: str, at: int = NOW, source: str = "x") -> Cause:
    return Cause(f"{row}:{source}", row, row, PRIORITY[row], source, nan, nan, -1, at, "")


def test_the_table_is_the_one_that_was_written_by_hand() -> None:
    lines = [line.split() for line in BY_HAND.strip().splitlines()]
    assert [line[0] for line in lines] == [row.id for row in ROWS]
    for line, row in zip(lines, ROWS, strict=True):
        assert [effect.name for effect in row.effects] == line[1:6], row.id
        assert row.escape is (line[6] == "E"), row.id
        assert row.latched is (row.id != "12a")


@given(st.lists(st.sampled_from([row.id for row in ROWS]), min_size=1, max_size=5))
def test_of_several_causes_the_most_de_energising_acts(rows) -> None:
    singles = [effects_of((cause_of(row),), NOW) for row in rows]
    together = effects_of(tuple(map(cause_of, rows)), NOW)
    for output in range(len(OUTPUTS)):
        listed = [single[output] for single in singles]
        if output == MAGNET and Effect.RAMP in listed:
            assert together[output] is Effect.RAMP  # never an abrupt disconnection beside a ramp
        else:
            assert together[output] is max(listed)
        assert not any(outranks(output, each, together[output]) for each in listed)


def test_hold_becomes_a_ramp_after_its_time() -> None:
    cause = (cause_of("3"),)
    assert effects_of(cause, NOW + 30 * NS - 1)[0] is Effect.HOLD
    assert effects_of(cause, NOW + 30 * NS)[0] is Effect.RAMP
    assert effects_of((cause_of("10"),), NOW + 10**6 * NS)[0] is Effect.HOLD  # no time in its row


@pytest.mark.parametrize(
    ("source", "dropped"), [("accelerating.volts", True), ("source", True), ("magnet.amps", False)]
)
def test_a_lost_device_of_the_high_voltage_chain_drops_the_permit_line(source, dropped) -> None:
    assert (effects_of((cause_of("7", source=source),), NOW)[PERMIT] is Effect.OFF) is dropped


def test_a_stale_sensor_acts_as_the_row_that_it_serves() -> None:
    stale = cause_of("8")._replace(serves="4b")
    assert effects_of((stale,), NOW) == effects_of((cause_of("4b"),), NOW)
