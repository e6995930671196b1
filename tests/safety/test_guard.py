"""Properties of the guard. They are stated in terms of requests and verdicts only, and are asked of
states that Hypothesis builds from the whole range of what a snapshot and the latches can hold.
"""

from __future__ import annotations

import math
import sys
from math import inf, nan, nextafter

import pytest
from hypothesis import assume, example, given, settings
from hypothesis import strategies as st
from safety_plant import bench_instrument

from controller.safety.assembly import ROLES
from controller.safety.envelope import build_envelope
from controller.safety.guard import granted, judge, lowers
from controller.safety.interlocks import NS
from controller.safety.safestate import judge_reset, latch
from controller.safety.values import (
    ACCELERATING,
    DETECTOR,
    ESA,
    INDEX,
    MAGNET,
    OUTPUTS,
    PERMIT,
    SUPPLIES,
    Action,
    Cause,
    Latches,
    Permit,
    Refusal,
    Request,
    Snapshot,
    Trip,
)
from drivers.contract import Quality, Reading
from drivers.inprocess import InProcessLink
from drivers.registry import open_device

INSTRUMENT = bench_instrument()


class Nobody:
    """A twin that is never asked."""

    def identity(self): ...

    def report(self): ...

    def command(self, verb, *values): ...


CHANNELS = [
    channel
    for role in ROLES
    for channel in open_device(
        role, getattr(INSTRUMENT.devices, role).driver, InProcessLink(role, Nobody()), lambda: 0
    ).monitor.channels
]
ENVELOPE = build_envelope(INSTRUMENT, CHANNELS)
SLOTS = {name: slot for slot, name in enumerate(ENVELOPE.channels)}
NOW = 1_000 * NS

GOOD = dict.fromkeys(ENVELOPE.channels, 0.0) | {
    "probe.tesla": 0.4, "source_gauge.pascals": 1e-3, "analyser_gauge.pascals": 1e-5, "water.flow": 1e-4,
    "water.switch": 1.0, "interlocks.cover_a": 1.0, "interlocks.cover_b": 1.0, "permit.echo": 1.0,
    "interlocks.emergency_stop": 1.0, "interlocks.thermostat": 1.0, "interlocks.mains": 1.0,
    "magnet.coil_kelvin": 300.0, "magnet.amps": 3.0, "magnet.set_amps": 3.0, "accelerating.volts": 4000.0,
    "accelerating.set_volts": 4000.0, "esa.outer_volts": 240.0, "esa.inner_volts": -240.0,
    "esa.set_volts": 480.0, "detector.volts": 1000.0, "detector.set_volts": 1000.0, "source.open": 1.0,
} | {f"{role}.status": 3.0 for role in ("magnet", "accelerating", "esa", "detector", "source")}  # fmt: skip
DEMANDS = (4000.0, 480.0, 3.0, 1000.0, 1.0, 1.0)


def snapshot_of(values: dict[str, float], *, at: int = NOW, age: int = 0, live: bool = True) -> Snapshot:
    readings = tuple(Reading(values[name], Quality.GOOD, at - age, name) for name in ENVELOPE.channels)
    return Snapshot(7, at, readings, DEMANDS, live, ())


def working(at: int = NOW) -> Latches:
    """Everything up and well, the last permits a second ago."""
    return Latches(
        first_out=None, causes=(), started=True, proven=(True,) * 6, enabled=(True,) * 6, demands=DEMANDS,
        permitted_ns=(at - NS,) * 6, held=(at - 500 * NS,) * len(ENVELOPE.bounds), confirmed=False,
    )  # fmt: skip


SNAPSHOT, WORKING = snapshot_of(GOOD), working()
REST = WORKING._replace(enabled=(False,) * 5 + (True,), demands=(0.0,) * 5 + (1.0,))
AT_REST = snapshot_of(
    GOOD | {name: 0.0 for name in GOOD if name.endswith(("volts", "_amps"))} | {"magnet.amps": 0.0}
)

wild = st.floats(allow_nan=True, allow_infinity=True)
qualities = st.sampled_from(list(Quality))
outputs = st.sampled_from(OUTPUTS)
actions = st.sampled_from(list(Action))


@st.composite
def snapshots(draw) -> Snapshot:
    """From all good to all wrong: each channel may be replaced by anything at all."""
    readings = list(SNAPSHOT.readings)
    for slot in draw(st.lists(st.sampled_from(range(len(readings))), max_size=len(readings), unique=True)):
        readings[slot] = Reading(
            draw(wild | st.just(readings[slot].value)), draw(qualities),
            draw(st.integers(NOW - 10 * NS, NOW + NS) | st.just(-1)), readings[slot].source,
        )  # fmt: skip
    return SNAPSHOT._replace(readings=tuple(readings))


CAUSE = Cause("1:x", "1", "1", 1, "x", nan, nan, -1, NOW, "")


@st.composite
def latches(draw) -> Latches:
    demand = st.floats(0, 1e4) | st.just(nan) | st.just(0.0)
    flags = st.tuples(*[st.booleans()] * 6) | st.just((True,) * 6)
    first = draw(st.none() | st.just(CAUSE))
    return Latches(
        first_out=first, causes=() if first is None else (first,), started=draw(st.booleans()),
        proven=draw(flags), enabled=draw(flags), demands=draw(st.tuples(*[demand] * 6) | st.just(DEMANDS)),
        permitted_ns=draw(st.tuples(*[st.integers(NOW - 20 * NS, NOW) | st.just(-1)] * 6)),
        held=draw(st.tuples(*[st.integers(NOW - 100 * NS, NOW) | st.just(-1)] * len(ENVELOPE.bounds))),
        confirmed=draw(st.booleans()),
    )  # fmt: skip


values = wild | st.floats(0, 1e4) | st.sampled_from([0.0, 3.0, 3.1, 480.0, 500.0, 4000.0, 4100.0, 1000.0])
requests = st.builds(Request, outputs, actions, values, st.integers(NOW, NOW + NS))


def energises(state: Latches, request: Request) -> bool:
    """An independent reading of "energises": enabling, or a set-point above the demand."""
    if request.action is Action.ENABLE:
        return True
    if request.action is Action.DISABLE:
        return False
    demand = state.demands[INDEX[request.output]]
    return not (request.value == 0 or 0 <= request.value <= demand)


# --- 1, 2: total and pure ----------------------------------------------------------------------------


@given(
    st.sampled_from([*OUTPUTS, "", "pump", "MAGNET"]),
    st.sampled_from([*Action, None, "write"]),
    values | st.none() | st.text(max_size=3) | st.booleans() | st.integers() | st.just(10**400),
    st.integers(-(10**20), 10**20),
    snapshots(),
    latches(),
)
def test_one_verdict_for_anything(output, action, value, at_ns, snapshot, state) -> None:
    request = Request(output, action, value, at_ns)
    verdict = judge(ENVELOPE, snapshot, state, request)
    assert type(verdict) in (Permit, Refusal, Trip)
    assert verdict.reason
    again = judge(ENVELOPE, snapshot, state, request)
    assert repr(again) == repr(verdict)


@given(snapshots(), latches())
def test_an_unknown_output_or_action_is_refused(snapshot, state) -> None:
    assert isinstance(judge(ENVELOPE, snapshot, state, Request("pump", Action.DISABLE, 0.0, NOW)), Refusal)
    assert isinstance(judge(ENVELOPE, snapshot, state, Request("esa", "explode", 0.0, NOW)), Refusal)


# --- 3, 8, 26: limits --------------------------------------------------------------------------------


@given(snapshots(), latches(), requests)
def test_no_permit_carries_a_value_outside_the_envelope(snapshot, state, request) -> None:
    assume(request.action is Action.WRITE)
    inside = 0 <= request.value <= ENVELOPE.outputs[INDEX[request.output]].maximum
    if isinstance(judge(ENVELOPE, snapshot, state, request), Permit) and energises(state, request):
        assert inside


@given(snapshots(), latches(), outputs, st.sampled_from([nan, inf, -inf, None, "1", True]))
def test_what_is_no_finite_number_is_refused(snapshot, state, output, value) -> None:
    assert isinstance(judge(ENVELOPE, snapshot, state, Request(output, Action.WRITE, value, NOW)), Refusal)


@pytest.mark.parametrize("output", ["accelerating", "esa", "magnet", "detector"])
def test_at_the_limit_yes_and_the_next_number_no(output: str) -> None:
    number = INDEX[output]
    limits = ENVELOPE.outputs[number]

    def verdict(demand: float, value: float, seconds: float = 100.0):
        state = WORKING._replace(
            demands=tuple(demand if i == number else d for i, d in enumerate(DEMANDS)),
            permitted_ns=(NOW - round(seconds * NS),) * 6,
        )
        if output in ("accelerating", "esa"):  # keep the pair together
            other = ESA if number == ACCELERATING else ACCELERATING
            pair = value * ENVELOPE.esa_ratio if number == ACCELERATING else value / ENVELOPE.esa_ratio
            state = state._replace(
                demands=tuple(pair if i == other else d for i, d in enumerate(state.demands))
            )
        return judge(ENVELOPE, SNAPSHOT, state, Request(output, Action.WRITE, value, NOW))

    below = limits.maximum - limits.step / 2
    assert isinstance(verdict(below, limits.maximum), Permit)
    assert isinstance(verdict(below, nextafter(limits.maximum, inf)), Refusal)
    base = limits.maximum / 4
    assert isinstance(verdict(base, base + limits.step), Permit)
    assert isinstance(verdict(base, nextafter(base + limits.step, inf)), Refusal)
    seconds = 0.25 * limits.step / limits.per_second
    room = limits.per_second * (round(seconds * NS) / NS)
    assert isinstance(verdict(base, base + room, seconds), Permit)
    assert isinstance(verdict(base, nextafter(base + room, inf), seconds), Refusal)


def test_the_joint_limit_at_its_edge() -> None:
    esa = WORKING.demands[ESA]
    state = WORKING._replace(permitted_ns=(NOW - 100 * NS,) * 6)
    edge = (esa + ENVELOPE.esa_part_volts) / ENVELOPE.esa_ratio
    step = ENVELOPE.outputs[ACCELERATING].step
    state = state._replace(demands=(edge - step / 2, *state.demands[1:]))

    def verdict(value: float):
        return judge(ENVELOPE, SNAPSHOT, state, Request("accelerating", Action.WRITE, value, NOW))

    assert isinstance(verdict(edge - 0.01), Permit)
    refused = verdict(edge + 0.01)
    assert isinstance(refused, Refusal)
    assert "apart" in refused.reason


# --- 4: what lowers is always permitted --------------------------------------------------------------


@given(snapshots(), latches(), st.sampled_from(["accelerating", "esa", "detector"]), st.floats(0, 1))
def test_high_voltage_is_lowered_from_any_state(snapshot, state, output, share) -> None:
    demand = state.demands[INDEX[output]]
    for action, value in [(Action.WRITE, 0.0), (Action.DISABLE, 0.0), (Action.WRITE, share * demand)]:
        if not math.isnan(value):
            assert isinstance(judge(ENVELOPE, snapshot, state, Request(output, action, value, NOW)), Permit)


@given(snapshots(), latches(), st.sampled_from(["source", "permit"]))
def test_gates_are_shut_from_any_state(snapshot, state, output) -> None:
    assert isinstance(judge(ENVELOPE, snapshot, state, Request(output, Action.DISABLE, 0.0, NOW)), Permit)


@given(snapshots(), latches(), st.floats(0, 1), st.integers(1, NS))
def test_the_magnet_is_ramped_down_from_any_state(snapshot, state, share, gap) -> None:
    demand, limits = state.demands[MAGNET], ENVELOPE.outputs[MAGNET]
    assume(not math.isnan(demand))
    state = state._replace(permitted_ns=(NOW - gap,) * 6)
    room = min(limits.per_second * (gap / NS), limits.step)
    value = max(demand - share * room, 0.0)
    assert isinstance(judge(ENVELOPE, snapshot, state, Request("magnet", Action.WRITE, value, NOW)), Permit)


@given(latches(), st.floats(-20, 20), st.sampled_from([2.0, 3.0]))
def test_the_magnet_is_disabled_below_its_safe_current_only(state, amps, status) -> None:
    snapshot = snapshot_of(GOOD | {"magnet.amps": amps, "magnet.status": status})
    verdict = judge(ENVELOPE, snapshot, state, Request("magnet", Action.DISABLE, 0.0, NOW))
    off_already = status == 2.0
    assert isinstance(verdict, Permit) == (off_already or abs(amps) <= INSTRUMENT.magnet.safe_amps)


# --- 5, 6, 17, 18: quality and permissives -----------------------------------------------------------


def better(one: object, other: object) -> bool:
    """Whether verdict ``one`` permits what ``other`` does not."""
    return isinstance(one, Permit) and not isinstance(other, Permit)


@settings(max_examples=300)
@given(snapshots(), latches(), requests, st.sampled_from(range(len(CHANNELS))), qualities, st.integers(0, 20))
def test_a_worse_reading_never_turns_a_no_into_a_yes(snapshot, state, request, slot, quality, age) -> None:
    before = judge(ENVELOPE, snapshot, state, request)
    for worse in (
        snapshot.readings[slot]._replace(quality=quality or Quality.BAD),
        snapshot.readings[slot]._replace(at_ns=snapshot.readings[slot].at_ns - age * NS),
        Reading(nan, Quality.ABSENT, -1, "x"),
    ):
        if worse.quality is Quality.GOOD and snapshot.readings[slot].at_ns > request.at_ns:
            continue  # a reading from the future gets better by aging
        readings = (*snapshot.readings[:slot], worse, *snapshot.readings[slot + 1 :])
        after = judge(ENVELOPE, snapshot._replace(readings=readings), state, request)
        assert not better(after, before)


@given(requests, st.sampled_from(range(len(ENVELOPE.bounds))))
def test_a_permissive_made_false_never_energises(request, number) -> None:
    for snapshot, state in ((SNAPSHOT, WORKING), (AT_REST, REST)):
        before = judge(ENVELOPE, snapshot, state, request)
        lost = state._replace(held=tuple(-1 if i == number else h for i, h in enumerate(state.held)))
        assert not better(judge(ENVELOPE, snapshot, lost, request), before)


@given(snapshots(), latches(), requests, st.sampled_from(range(len(CHANNELS))))
def test_old_future_and_absent_are_the_same(snapshot, state, request, slot) -> None:
    role = ENVELOPE.channels[slot].partition(".")[0]
    stale = round(getattr(INSTRUMENT.devices, role).stale_after * NS)
    kinds = set()
    for reading in (
        snapshot.readings[slot]._replace(quality=Quality.GOOD, at_ns=request.at_ns - stale - 1),
        snapshot.readings[slot]._replace(quality=Quality.GOOD, at_ns=request.at_ns + 1),
        snapshot.readings[slot]._replace(quality=Quality.BAD, at_ns=request.at_ns),
        Reading(nan, Quality.ABSENT, -1, "x"),
    ):
        readings = (*snapshot.readings[:slot], reading, *snapshot.readings[slot + 1 :])
        verdict = judge(ENVELOPE, snapshot._replace(readings=readings), state, request)
        kinds.add((type(verdict), verdict.reason))
    assert len(kinds) == 1


NEEDED = {
    "magnet": ["interlocks.cover_a", "water.flow", "interlocks.emergency_stop", "magnet.coil_kelvin"],
    "accelerating": ["interlocks.cover_b", "source_gauge.pascals", "analyser_gauge.pascals", "water.switch"],
    "esa": ["interlocks.cover_a", "analyser_gauge.pascals", "interlocks.mains"],
    "detector": ["analyser_gauge.pascals", "interlocks.cover_a", "counter.rate"],
}


@pytest.mark.parametrize(("output", "channel"), [(o, c) for o, cs in NEEDED.items() for c in cs])
def test_each_condition_really_matters(output: str, channel: str) -> None:
    number = INDEX[output]
    raised = Request(output, Action.WRITE, DEMANDS[number] * 1.01, NOW)
    assert isinstance(judge(ENVELOPE, SNAPSHOT, WORKING, raised), Permit)
    enable = Request(output, Action.ENABLE, 0.0, NOW)
    assert isinstance(judge(ENVELOPE, AT_REST, REST, enable), Permit)
    wrong = {"magnet.coil_kelvin": 400.0, "source_gauge.pascals": 1.0, "analyser_gauge.pascals": 1.0}
    bad = Reading(nan, Quality.BAD, NOW, channel)  # a counter has no limit of its own, but must be heard

    def without(snapshot: Snapshot) -> Snapshot:
        readings = list(snapshot.readings)
        reading = readings[SLOTS[channel]]
        readings[SLOTS[channel]] = (
            bad if channel == "counter.rate" else reading._replace(value=wrong.get(channel, 0.0))
        )
        return snapshot._replace(readings=tuple(readings))

    assert not isinstance(judge(ENVELOPE, without(SNAPSHOT), WORKING, raised), Permit)
    assert isinstance(judge(ENVELOPE, without(AT_REST), REST, enable), Refusal)


# --- 7: tightening -----------------------------------------------------------------------------------


@given(
    snapshots(), latches(), requests, st.floats(0.1, 1.0), st.sampled_from(["maximum", "per_second", "step"])
)
def test_a_tighter_limit_never_turns_a_no_into_a_yes(snapshot, state, request, share, name) -> None:
    number = INDEX[request.output]
    limits = ENVELOPE.outputs[number]
    assume(math.isfinite(getattr(limits, name)))
    tight = limits._replace(**{name: getattr(limits, name) * share})
    outputs_ = tuple(tight if i == number else each for i, each in enumerate(ENVELOPE.outputs))
    envelope = ENVELOPE._replace(outputs=outputs_)
    assert not better(judge(envelope, snapshot, state, request), judge(ENVELOPE, snapshot, state, request))


# --- 9, 20, 24: authority ----------------------------------------------------------------------------


@given(snapshots(), latches(), requests)
def test_nothing_energises_while_latched_unproven_or_not_started(snapshot, state, request) -> None:
    number = INDEX[request.output]
    if isinstance(judge(ENVELOPE, snapshot, state, request), Permit) and energises(state, request):
        assert state.first_out is None
        assert state.started
        assert state.proven[number]


@given(requests)
def test_a_latch_answers_with_a_trip_that_names_its_row(request) -> None:
    state = WORKING._replace(first_out=CAUSE, causes=(CAUSE,))
    verdict = judge(ENVELOPE, SNAPSHOT, state, request)
    if (
        energises(state, request)
        and abs(request.value) <= 1e300
        and (request.action is Action.ENABLE or INDEX[request.output] in SUPPLIES)
    ):
        assert isinstance(verdict, Trip)
        assert verdict.row == "1"


# --- 10, 11, 12: latches and reset -------------------------------------------------------------------

causes = st.builds(
    Cause, st.sampled_from(["1:a", "4b:b", "11:c", "7:d"]), st.sampled_from(["1", "4b", "11", "7", "12a"]),
    st.just("1"), st.integers(0, 20), st.just("a"), wild, wild, st.integers(-1, NS), st.just(NOW),
    st.just(""),
)  # fmt: skip


@given(latches(), st.lists(st.lists(causes, max_size=3).map(tuple), max_size=5))
def test_the_first_out_never_changes_until_a_reset(state, ticks) -> None:
    first = state.first_out
    for tick in ticks:
        state = latch(state, tick)
        if first is not None:
            assert state.first_out is first
        first = state.first_out
        assert (first is None) == (not state.causes)
        ids = [cause.id for cause in state.causes]
        assert len(ids) == len(set(ids))


@given(snapshots(), latches(), st.sampled_from(["1:x", "other", ""]), st.booleans())
def test_a_reset_changes_no_output_and_needs_the_cause_gone(snapshot, state, name, present) -> None:
    answer = judge_reset(ENVELOPE, snapshot, state, (CAUSE,) if present else (), name)
    if isinstance(answer, Refusal):
        return
    assert not present
    assert name == state.first_out.id
    assert state.confirmed
    assert (answer.first_out, answer.causes) == (None, ())
    assert answer._replace(first_out=state.first_out, causes=state.causes) == state


def test_a_reset_is_accepted_when_all_is_well() -> None:
    state = WORKING._replace(first_out=CAUSE, causes=(CAUSE._replace(at_ns=NOW - 10 * NS),), confirmed=True)
    assert isinstance(judge_reset(ENVELOPE, SNAPSHOT, state, (), "1:x"), Latches)


# --- 13, 14: slopes and steps over sequences ---------------------------------------------------------


@settings(max_examples=200)
@given(
    st.sampled_from(["accelerating", "esa", "magnet", "detector"]),
    st.lists(st.tuples(st.integers(0, 3 * NS), st.floats(0, 1.2)), min_size=1, max_size=30),
)
@example("magnet", [(NS, 0.4), (10 * NS, 0.45), (NS // 20, 0.46)])
def test_permits_never_climb_faster_than_the_slope_nor_step_further_than_the_step(output, moves) -> None:
    number = INDEX[output]
    limits = ENVELOPE.outputs[number]
    envelope = ENVELOPE._replace(esa_part_volts=inf)  # one output at a time
    state, at = WORKING, NOW
    for gap, share in moves:
        at += gap
        snapshot = snapshot_of(GOOD, at=at)
        request = Request(output, Action.WRITE, share * limits.maximum, at)
        if not isinstance(judge(envelope, snapshot, state, request), Permit):
            continue
        before, since = state.demands[number], state.permitted_ns[number]
        change = request.value - before
        if output == "magnet":
            change = abs(change)
        assert change <= limits.per_second * (at - since) / NS * (1 + 1e-12) + 1e-9
        assert change <= limits.step * (1 + 1e-12)
        state = granted(state, request)
        assert state.demands[number] == request.value
        assert state.permitted_ns[number] == at


# --- 15, 16: only differences of time ----------------------------------------------------------------


@given(snapshots(), latches(), requests, st.integers(-900 * NS, 10**15))
def test_shifting_all_times_changes_nothing(snapshot, state, request, shift) -> None:
    def moved(ns: int) -> int:
        return ns + shift if ns >= 0 else ns  # "never" stays never

    later = snapshot._replace(
        at_ns=moved(snapshot.at_ns),
        readings=tuple(r._replace(at_ns=moved(r.at_ns)) for r in snapshot.readings),
    )
    other = state._replace(
        held=tuple(map(moved, state.held)), permitted_ns=tuple(map(moved, state.permitted_ns))
    )
    verdict = judge(ENVELOPE, later, other, request._replace(at_ns=moved(request.at_ns)))
    assert repr(verdict) == repr(judge(ENVELOPE, snapshot, state, request))


# --- 19, 21: detector and joint limits ---------------------------------------------------------------


@given(snapshots(), latches(), requests)
def test_detector_volts_are_raised_only_after_the_vacuum_has_held(snapshot, state, request) -> None:
    request = request._replace(output="detector")
    if isinstance(judge(ENVELOPE, snapshot, state, request), Permit) and energises(state, request):
        held = state.held[ENVELOPE.analyser_bound]
        assert held >= 0
        assert request.at_ns - held >= INSTRUMENT.interlocks.detector_vacuum_hold * NS


@settings(max_examples=200)
@given(st.lists(st.tuples(st.sampled_from(["accelerating", "esa"]), st.floats(0, 1)), max_size=40))
def test_no_raise_leaves_the_pair_further_apart_than_allowed(moves) -> None:
    state, at = WORKING, NOW
    for output, share in moves:
        at += NS
        request = Request(output, Action.WRITE, share * ENVELOPE.outputs[INDEX[output]].maximum, at)
        if not isinstance(judge(ENVELOPE, snapshot_of(GOOD, at=at), state, request), Permit):
            continue
        raised = request.value > state.demands[INDEX[output]]
        state = granted(state, request)
        if raised:
            apart = abs(state.demands[ESA] - ENVELOPE.esa_ratio * state.demands[ACCELERATING])
            assert apart <= ENVELOPE.esa_part_volts


def test_ions_are_let_out_only_when_the_optics_are_up() -> None:
    request = Request("source", Action.ENABLE, 0.0, NOW)
    assert isinstance(judge(ENVELOPE, SNAPSHOT, WORKING, request), Permit)
    for number in (ACCELERATING, ESA):
        demands = tuple(0.0 if i == number else d for i, d in enumerate(DEMANDS))
        assert isinstance(judge(ENVELOPE, SNAPSHOT, WORKING._replace(demands=demands), request), Refusal)


@pytest.mark.parametrize("output", ["accelerating", "esa", "detector"])
def test_volts_need_the_permit_line(output: str) -> None:
    request = Request(output, Action.ENABLE, 0.0, NOW)
    open_line = REST._replace(enabled=tuple(i != PERMIT for i in range(6)))
    assert isinstance(judge(ENVELOPE, AT_REST, REST, request), Permit)
    assert isinstance(judge(ENVELOPE, AT_REST, open_line, request), Refusal)


# --- 23: a no says why -------------------------------------------------------------------------------


@given(snapshots(), latches(), requests)
def test_a_no_from_a_reading_names_value_limit_and_age(snapshot, state, request) -> None:
    verdict = judge(ENVELOPE, snapshot, state, request)
    assert verdict.text()
    if "(row" in verdict.reason and "not usable" not in verdict.reason:
        assert math.isfinite(verdict.value)
        assert math.isfinite(verdict.limit)
        assert verdict.age_ns >= 0


def test_the_largest_float_is_refused_like_any_other() -> None:
    for value in (sys.float_info.max, -sys.float_info.max, 5e-324):
        state = WORKING._replace(enabled=(False,) * 6)
        assert not lowers(state, Request("magnet", Action.WRITE, abs(value) + 4.0, NOW))
        assert isinstance(
            judge(ENVELOPE, SNAPSHOT, state, Request("magnet", Action.WRITE, value + 4.0, NOW)), Refusal
        )


def test_detector_index_is_the_detector() -> None:
    """The columns of the table are indices: a slip would move effects to another output."""
    assert [OUTPUTS[number] for number in (ACCELERATING, ESA, MAGNET, DETECTOR)] == [
        "accelerating", "esa", "magnet", "detector",
    ]  # fmt: skip
