"""The monitors: only a whole, new, plausible report gives a good reading, whatever a device says.

Contract in one sentence: any object in place of a report gives readings that are good only where the
report was a tuple of the family's shape, with an advanced sequence and finite plausible floats.
"""

from __future__ import annotations

import asyncio
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.contract import DeviceRefused, DeviceReplied, DeviceTimeout, Limits, Quality
from drivers.inprocess import InProcessLink
from drivers.registry import DRIVERS, open_device

COUNTS = {
    "magnet-supply": (4, True),
    "field-probe": (1, False),
    "high-voltage": (3, True),
    "esa-pair": (4, True),
    "source-gate": (1, True),
    "counter": (1, False),
    "electrometer": (1, False),
    "vacuum-gauge": (1, False),
    "water": (2, False),
    "interlock-inputs": (5, False),
    "permit-output": (1, False),
}  # fmt: skip  (number of values: docs/telegrams.md)
GOOD_VALUES = {
    "magnet-supply": (1.0, 2.0, 1.0, 300.0), "field-probe": (0.5,), "high-voltage": (8e3, 1e-6, 8e3),
    "esa-pair": (480.0, -480.0, 960.0, 1e-6), "source-gate": (1.0,), "counter": (1e5,),
    "electrometer": (0.5,), "vacuum-gauge": (1e-5,), "water": (1e-4, 1.0),
    "interlock-inputs": (1.0,) * 5, "permit-output": (0.0,),
}  # fmt: skip


class Script:
    """A twin that gives what it was told to give, one answer after the other; the last one stays."""

    def __init__(self, *answers: object) -> None:
        self.answers = list(answers)
        self.sent: list[tuple[object, ...]] = []

    def next(self) -> object:
        return self.answers.pop(0) if len(self.answers) > 1 else self.answers[0]

    def identity(self) -> object:
        return self.next()

    def report(self) -> object:
        return self.next()

    def command(self, verb: str, *values: float) -> object:
        self.sent.append((verb, *values))
        return self.next()


class Time:
    """Nanoseconds that a test sets."""

    def __init__(self) -> None:
        self.ns = 1_000

    def __call__(self) -> int:
        return self.ns


def device(driver: str, *answers: object):
    twin, time = Script(*answers), Time()
    return open_device("dut", driver, InProcessLink("dut", twin), time), twin, time


@pytest.mark.parametrize("driver", sorted(DRIVERS))
def test_a_good_report_gives_good_readings(driver: str) -> None:
    count, with_status = COUNTS[driver]
    opened, _, _ = device(driver, (1, 3, GOOD_VALUES[driver]))
    assert {reading.quality for reading in opened.monitor.latest()} == {Quality.ABSENT}
    opened.monitor.poll()
    readings = opened.monitor.latest()
    assert [reading.value for reading in readings][:count] == list(GOOD_VALUES[driver])
    assert len(readings) == count + with_status == len(opened.monitor.channels)
    assert all(r.quality is Quality.GOOD and r.at_ns == 1_000 for r in readings)
    assert [r.source for r in readings] == [c.name for c in opened.monitor.channels]
    if with_status:
        assert readings[-1].value == 3.0
        assert readings[-1].source == "dut.status"


numbers = st.floats(allow_nan=True, allow_infinity=True) | st.integers() | st.booleans()
anything = st.recursive(
    st.none() | numbers | st.text(max_size=4) | st.binary(max_size=4),
    lambda inner: st.lists(inner, max_size=5) | st.lists(inner, max_size=6).map(tuple),
    max_leaves=8,
)
reports = anything | st.tuples(
    st.integers(-2, 40), st.integers(-2, 40), st.lists(numbers, max_size=6).map(tuple)
)


@given(driver=st.sampled_from(sorted(DRIVERS)), answers=st.lists(reports, min_size=1, max_size=8))
def test_only_whole_plausible_and_new_reports_are_good(driver: str, answers: list[object]) -> None:
    opened, _, _ = device(driver, *answers, None)
    count, with_status = COUNTS[driver]
    acceptable = [
        answer
        for answer in answers
        if isinstance(answer, tuple)
        and len(answer) == 3
        and type(answer[0]) is int
        and answer[0] >= 0
        and type(answer[1]) is int
        and 0 <= answer[1] < 32
        and isinstance(answer[2], tuple)
        and len(answer[2]) == count
    ]
    for _ in answers:
        opened.monitor.poll()
    readings = opened.monitor.latest()
    assert len(readings) == count + with_status
    for slot, reading in enumerate(readings):
        if reading.quality is Quality.GOOD:
            assert type(reading.value) is float
            assert math.isfinite(reading.value)
            if slot < count:
                assert any(
                    type(answer[2][slot]) in (int, float) and answer[2][slot] == reading.value
                    for answer in acceptable
                )
        else:
            assert math.isnan(reading.value)
            assert reading.detail


@given(value=st.sampled_from([math.nan, math.inf, -math.inf, 1e300, -1e300, True, "1.0", None]))
def test_each_implausible_value_makes_its_channel_bad_and_no_other(value: object) -> None:
    opened, _, _ = device("high-voltage", (1, 3, (8e3, value, 8e3)), (2, 3, (8e3, value, 8e3)))
    opened.monitor.poll()
    volts, amps, set_volts, status = opened.monitor.latest()
    assert amps.quality is Quality.BAD
    assert "plausible" in amps.detail
    assert [r.quality for r in (volts, set_volts, status)] == [Quality.GOOD] * 3


def test_whole_numbers_sent_as_integers_are_taken_as_floats() -> None:
    opened, _, _ = device("water", (1, 0, (1e-4, 1)))
    opened.monitor.poll()
    assert [type(reading.value) for reading in opened.monitor.latest()] == [float, float]
    assert opened.monitor.latest()[1].quality is Quality.GOOD


def test_a_frozen_device_keeps_its_old_time_so_that_it_grows_stale() -> None:
    opened, _, time = device("vacuum-gauge", (7, 0, (1e-5,)), (7, 0, (1e-5,)))
    opened.monitor.poll()
    first = opened.monitor.latest()
    for _ in range(20):
        time.ns += 50_000_000
        opened.monitor.poll()
    assert opened.monitor.latest() is first
    assert first[0].at_ns == 1_000


def test_silence_keeps_the_old_time_too() -> None:
    opened, _, time = device("vacuum-gauge", (7, 0, (1e-5,)), None)
    opened.monitor.poll()
    time.ns += 10**9
    opened.monitor.poll()
    assert opened.monitor.latest()[0] == (1e-5, Quality.GOOD, 1_000, "dut.pascals", "")


def test_one_bad_reply_is_asked_again_at_once_and_forgotten() -> None:
    opened, _, _ = device("counter", (1, 0, (5.0,)), "#?%", (2, 0, (6.0,)))
    opened.monitor.poll()
    opened.monitor.poll()
    assert opened.monitor.latest()[0].value == 6.0


def test_two_bad_replies_in_a_row_are_bad() -> None:
    opened, _, _ = device("counter", (1, 0, (5.0,)), "#?%", "#?%")
    opened.monitor.poll()
    opened.monitor.poll()
    (reading,) = opened.monitor.latest()
    assert reading.quality is Quality.BAD
    assert "#?%" in reading.detail


def test_the_third_bad_reply_within_a_minute_is_bad_even_if_asking_again_would_help() -> None:
    answers = [x for n in range(1, 4) for x in ("#?%", (n, 0, (float(n),)))]
    opened, _, time = device("counter", *answers)
    qualities = []
    for _ in range(3):
        opened.monitor.poll()
        qualities.append(opened.monitor.latest()[0].quality)
        time.ns += 10_000_000_000
    assert qualities == [Quality.GOOD, Quality.GOOD, Quality.BAD]


def test_bad_replies_further_apart_than_a_minute_are_forgiven() -> None:
    answers = [x for n in range(1, 6) for x in ("#?%", (n, 0, (float(n),)))]
    opened, _, time = device("counter", *answers)
    for _ in range(5):
        opened.monitor.poll()
        assert opened.monitor.latest()[0].quality is Quality.GOOD
        time.ns += 31_000_000_000


def test_a_late_answer_is_not_taken_for_a_new_one() -> None:
    opened, _, _ = device("counter", (9, 0, (5.0,)), (8, 0, (4.0,)), (8, 0, (4.0,)), (10, 0, (6.0,)))
    opened.monitor.poll()
    opened.monitor.poll()
    assert opened.monitor.latest()[0].value != 4.0
    opened.monitor.poll()
    assert opened.monitor.latest()[0].value == 6.0


def test_a_gauge_that_is_off_reads_zero_and_is_bad() -> None:
    opened, _, _ = device("vacuum-gauge", (1, 0, (0.0,)), (2, 0, (0.0,)))
    opened.monitor.poll()
    assert opened.monitor.latest()[0].quality is Quality.BAD


@given(answer=anything.filter(lambda a: a is not None))
def test_an_identity_is_five_parts_or_an_error(answer: object) -> None:
    opened, _, _ = device("water", answer)
    well = isinstance(answer, tuple) and [type(part) for part in answer] == [str, str, str, str, bool]
    if well:
        assert tuple(asyncio.run(opened.monitor.identify())) == answer
    else:
        with pytest.raises(DeviceReplied):
            asyncio.run(opened.monitor.identify())


def test_no_identity_is_a_timeout() -> None:
    opened, _, _ = device("water", None)
    with pytest.raises(DeviceTimeout):
        asyncio.run(opened.monitor.identify())


def test_the_monitor_reaches_no_command() -> None:
    """From a monitor's own attributes neither the link's command nor the handle can be had."""
    opened, _, _ = device("magnet-supply", (1, 3, (1.0, 2.0, 1.0, 300.0)))
    own = [
        getattr(opened.monitor, name)
        for name in type(opened.monitor).__slots__
        if hasattr(opened.monitor, name)
    ]
    assert not any(hasattr(thing, "command") or hasattr(thing, "write") for thing in own)
    assert opened.handle is not None
    assert opened.handle not in own


# --- hands and gates ---------------------------------------------------------------------------------


def act(driver: str, method: str, *arguments: object, answers: tuple[object, ...]):
    opened, twin, _ = device(driver, *answers)
    result = asyncio.run(getattr(opened.handle, method)(*arguments))
    return result, twin.sent


@pytest.mark.parametrize("code", [1, 2, 3, 4, 5, 77])
def test_each_code_is_a_refusal_with_its_meaning(code: int) -> None:
    with pytest.raises(DeviceRefused, match="refused: "):
        act("magnet-supply", "write", 1.0, answers=((float(code),),))


@pytest.mark.parametrize(
    "answer", ["garbage", (), ("0",), (math.nan,), (0.0, math.inf), [0.0], (True,), (0.0, 1.0)]
)
def test_a_command_answered_with_garbage_is_an_error(answer: object) -> None:
    with pytest.raises(DeviceReplied):
        act("magnet-supply", "enable", answers=(answer,))


def test_a_command_without_an_answer_is_a_timeout() -> None:
    with pytest.raises(DeviceTimeout):
        act("magnet-supply", "disable", answers=(None,))


def test_a_supply_says_what_the_telegrams_say() -> None:
    limits = Limits(10.0, 5.0, 2.0)
    assert act("magnet-supply", "write", 1.5, answers=((0.0,),)) == (None, [("set", 1.5)])
    assert act("magnet-supply", "enable", answers=((0.0,),)) == (None, [("enable",)])
    assert act("magnet-supply", "disable", answers=((0.0,),)) == (None, [("disable",)])
    assert act("esa-pair", "write_limits", limits, answers=((0.0,),)) == (
        None,
        [("set_limits", 10.0, 5.0, 2.0)],
    )
    assert act("high-voltage", "read_limits", answers=((0.0, 10.0, 5.0, 2.0),)) == (limits, [("limits",)])


@pytest.mark.parametrize("driver", ["source-gate", "permit-output"])
def test_a_gate_has_neither_set_point_nor_limits(driver: str) -> None:
    for method, arguments in (("write", (1.0,)), ("write_limits", (Limits(1, 1, 1),)), ("read_limits", ())):
        with pytest.raises(DeviceRefused):
            act(driver, method, *arguments, answers=((0.0,),))


def test_a_gate_of_a_detector() -> None:
    opened, twin, time = device("counter", (0.0,), (5.0,), (0.0, 1.0, 3.0, 2.0, 1234.0, 0.0))
    assert opened.detector is not None
    asyncio.run(opened.detector.start(2.0))
    time.ns = 3_000_000_000
    with pytest.raises(DeviceReplied):  # code 5: it still runs
        asyncio.run(opened.detector.collect())
    gate = asyncio.run(opened.detector.collect())
    assert gate == (1_000_000_000, 3_000_000_000, 2.0, 1234.0, False)
    assert twin.sent == [("gate", 2.0), ("gate_read",), ("gate_read",)]


@pytest.mark.parametrize(
    "answer",
    [
        (0.0, 1.0, 3.0, 2.5, 10.0, 0.0),  # live longer than the gate
        (0.0, 3.0, 1.0, 2.0, 10.0, 0.0),  # ends before it starts
        (0.0, 1.0, 11.0, 10.0, 10.0, 0.0),  # another gate than the one asked for
        (0.0, 9.0, 11.0, 2.0, 10.0, 0.0),  # ends in the future
        (0.0, 1.0, 3.0, 2.0, 10.0, 0.5),  # half an over-range
        (0.0, 1.0, 3.0, 2.0, 10.0),
    ],
)
def test_an_impossible_gate_is_an_error(answer: object) -> None:
    opened, _, time = device("counter", (0.0,), answer)
    assert opened.detector is not None
    asyncio.run(opened.detector.start(2.0))
    time.ns = 3_000_000_000
    with pytest.raises(DeviceReplied):
        asyncio.run(opened.detector.collect())
