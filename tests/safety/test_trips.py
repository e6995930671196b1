"""Trips in virtual time, judged by what the plant felt: its own log of commands and its own levels."""

from __future__ import annotations

import math
from itertools import pairwise

import pytest
from safety_plant import Rig, run

from controller.errors import ExitCode
from controller.safety.values import Action, Permit, Refusal, Trip
from drivers.contract import DeviceTimeout

HV = ("accelerating", "esa", "detector")


def off_after(rig: Rig, role: str, since: float) -> float:
    """Seconds from ``since`` until the device was told to disable; inf if it was not."""
    times = [at for at, verb, _ in rig.twins[role].commands if verb == "disable" and at >= since]
    return min(times, default=math.inf) - since


def steepest(rig: Rig, role: str, since: float) -> float:
    """The steepest fall of the set-points given from ``since`` on, per second."""
    given = [(at, value) for at, value in rig.twins[role].history if at >= since - 0.2]
    return max(
        ((a - b) / (t2 - t1) for (t1, a), (t2, b) in pairwise(given) if t2 > t1),
        default=0.0,
    )


CASES = [
    # what happens, first-out, row's words, outputs off at once within, magnet ramps
    ("cover", "1:interlocks.cover_a", 0.11, True),
    ("emergency", "11:interlocks.emergency_stop", 0.11, None),
    ("analyser", "4b:analyser_gauge.pascals", 0.11, False),
    ("source vacuum", "4a:source_gauge.pascals", 0.11, False),
    ("arc", "5:accelerating.amps", 0.16, False),
    ("device trip", "5:detector.status", 0.16, False),
]


def harm(rig: Rig, what: str) -> None:
    if what == "cover":
        rig.interlocks.given[0] = 0.0
    elif what == "emergency":
        rig.interlocks.given[2] = 0.0
    elif what == "analyser":
        rig.analyser_gauge.given[0] = 2e-3
    elif what == "source vacuum":
        rig.source_gauge.given[0] = 2e-2
    elif what == "arc":
        plain = type(rig.accelerating).values
        rig.accelerating.values = lambda: (100.0, 5e-3, plain(rig.accelerating)[2])
    elif what == "device trip":
        rig.detector.tripped = True


@pytest.mark.parametrize(("what", "first_out", "within", "magnet"), CASES)
def test_causes_that_switch_off_at_once(
    what: str, first_out: str, within: float, magnet: bool | None
) -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        since = rig.clock.seconds()
        harm(rig, what)
        await rig.clock.sleep(1.0)
        assert rig.supervisor.first_out is not None
        assert rig.supervisor.first_out.id == first_out
        for role in (*HV, "source"):
            assert off_after(rig, role, since) <= within, role
        ramp = [value for at, value in rig.magnet.history if at >= since]
        if magnet is None:  # emergency stop: the supply has lost its power in hardware
            assert off_after(rig, "magnet", since) <= within
        elif magnet:
            assert ramp == sorted(ramp, reverse=True)
            assert ramp[0] > 3.0
            assert off_after(rig, "magnet", since) == math.inf
        else:
            assert ramp == []
        assert [event.kind for event in rig.told].count("trip") == 1
        assert rig.told[0].exit_code is ExitCode.TRIPPED
        assert "Next:" in rig.told[0].text

    run(body)


def test_the_magnet_is_ramped_within_its_slope_and_disabled_only_below_its_safe_current() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        since = rig.clock.seconds()
        rig.interlocks.given[0] = rig.interlocks.given[1] = 0.0
        rig.amps_when_off: list[float] = []
        plain = rig.magnet.obey

        def obey(verb, values):
            if verb == "disable":
                rig.amps_when_off.append(rig.magnet.settle())
            return plain(verb, values)

        rig.magnet.obey = obey
        await rig.clock.sleep(15.0)
        assert steepest(rig, "magnet", since) <= rig.instrument.magnet.amps_per_second_max * (1 + 1e-9)
        assert rig.amps_when_off
        assert max(rig.amps_when_off) <= rig.instrument.magnet.safe_amps
        assert rig.permit.enabled is False  # row 1 drops the permit line

    run(body)


def test_water_is_debounced_and_then_ramps_everything() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        since = rig.clock.seconds()
        rig.water.given[0] = 1e-5
        await rig.clock.sleep(1.9)
        assert not rig.supervisor.latched
        refused = await rig.gateway.request("magnet", Action.WRITE, 4.1)
        assert isinstance(refused, Refusal)
        await rig.clock.sleep(0.9)
        assert rig.supervisor.first_out is not None
        assert rig.supervisor.first_out.id == "2:water.flow"
        await rig.clock.sleep(3.0)
        for role in HV:
            fall = steepest(rig, role, since)
            assert 0 < fall <= getattr(rig.instrument, role).volts_per_second_max * (1 + 1e-9), role
            assert off_after(rig, role, since) < 5.0
        assert off_after(rig, "source", since) <= 2.6

    run(body)


def test_a_short_dip_of_the_water_is_forgiven() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.water.given[0] = 1e-5
        await rig.clock.sleep(1.2)
        rig.water.given[0] = 1e-4
        await rig.clock.sleep(5.0)
        assert not rig.supervisor.latched

    run(body)


@pytest.mark.parametrize(
    ("role", "gain", "row"),
    [
        ("accelerating", 0.97, "6a"),
        ("esa", 0.9, "6a"),
        ("magnet", 0.97, "6a"),
        ("detector", 1.05, "6b"),
        ("magnet", 1.05, "6b"),
    ],
)
def test_a_read_back_off_its_demand_trips(role: str, gain: float, row: str) -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.twins[role].gain = gain
        await rig.clock.sleep(1.6)
        assert rig.supervisor.first_out is not None
        assert rig.supervisor.first_out.row == row
        assert rig.supervisor.first_out.source.startswith(f"{role}.")

    run(body)


def test_a_steady_stream_of_small_set_points_does_not_hide_a_deviation() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.magnet.gain = 0.97
        for number in range(40):
            await rig.gateway.request("magnet", Action.WRITE, 4.0 + 1e-4 * (number % 2))
            await rig.clock.sleep(0.05)
        assert rig.supervisor.first_out is not None
        assert rig.supervisor.first_out.id == "6a:magnet.amps"

    run(body)


def test_a_supply_that_stays_behind_its_ramp_trips() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.magnet.stuck = True
        verdicts = []
        for number in range(1, 120):
            verdicts.append(await rig.gateway.request("magnet", Action.WRITE, 4.0 + 0.05 * number))
            await rig.clock.sleep(0.05)
            if rig.supervisor.latched:
                break
        assert rig.supervisor.first_out is not None
        assert rig.supervisor.first_out.id == "6a:magnet.amps"
        assert len(verdicts) * 0.05 <= 3.1

    run(body)


STALE = {
    "analyser_gauge": ("8:analyser_gauge.pascals", 0.3, HV, ()),
    "interlocks": ("8:interlocks.emergency_stop", 0.3, HV, ("magnet",)),
    "water": ("8:water.flow", 2.2, (), HV),
    "magnet": ("7:magnet", 0.65, ("accelerating", "detector"), ("esa",)),
    "accelerating": ("7:accelerating", 0.55, ("accelerating", "detector"), ("esa",)),
    "probe": ("8:probe.tesla", 0.65, (), HV),
}


@pytest.mark.parametrize("mode", ["silent", "frozen", "garbled"])
@pytest.mark.parametrize("role", sorted(STALE))
def test_what_is_not_heard_acts_as_the_worst_that_it_serves(role: str, mode: str) -> None:
    first_out, within, off, ramped = STALE[role]

    async def body(rig: Rig) -> None:
        await rig.up()
        since = rig.clock.seconds()
        rig.twins[role].mode = mode
        await rig.clock.sleep(within)
        assert rig.supervisor.first_out is not None
        found = rig.supervisor.first_out.id
        wanted = first_out.replace("8:", "9:") if mode == "garbled" else first_out
        assert found.startswith(wanted)
        for output in off:
            assert off_after(rig, output, since) <= within, output
        await rig.clock.sleep(3.0)
        for output in ramped:
            fall = [value for at, value in rig.twins[output].history if at >= since]
            assert fall, output
            assert fall == sorted(fall, reverse=True)

    run(body)


def test_one_garbled_reply_trips_nothing() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        plain, replies = rig.analyser_gauge.values, ["#?%"]
        rig.analyser_gauge.values = lambda: replies.pop() if replies else plain()
        await rig.clock.sleep(2.0)
        assert not replies
        assert not rig.supervisor.latched

    run(body)


def test_cover_channels_that_disagree_are_an_interlock_fault_too() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.interlocks.given[1] = 0.0
        await rig.clock.sleep(0.5)
        assert [cause.id for cause in rig.supervisor.causes][:2] == [
            "1:interlocks.cover_b",
            "1b:interlocks.cover_b",
        ]

    run(body)


def test_the_first_out_is_frozen_and_the_same_tick_is_ordered_by_the_table() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.analyser_gauge.given[0] = 1.0
        rig.interlocks.given[0] = 0.0
        rig.interlocks.given[2] = 0.0
        await rig.clock.sleep(0.3)
        rig.source_gauge.given[0] = 1.0
        await rig.clock.sleep(0.3)
        ids = [cause.id for cause in rig.supervisor.causes]
        assert ids[0] == rig.supervisor.first_out.id == "11:interlocks.emergency_stop"
        assert ids[1:3] == ["1:interlocks.cover_a", "4b:analyser_gauge.pascals"]
        assert "4a:source_gauge.pascals" in ids[3:]
        assert [event.kind for event in rig.told][:3] == ["trip", "cause", "cause"]

    run(body)


def test_a_trip_acts_first_and_writes_after() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        order: list[str] = []
        for role in (*HV, "source"):
            plain = rig.twins[role].obey

            def obey(verb, values, role=role, plain=plain):
                order.append(f"{verb} {role}")
                return plain(verb, values)

            rig.twins[role].obey = obey
        for name in ("request", "event", "telemetry"):
            said = getattr(rig.journal, name)
            setattr(rig.journal, name, lambda *a, name=name, said=said: (order.append(name), said(*a))[1])
        order.clear()
        rig.interlocks.given[0] = 0.0
        while not rig.told:
            await rig.clock.sleep(0.01)
        order = [each for each in order if each != "telemetry"]
        last_disable = max(order.index(f"disable {role}") for role in (*HV, "source"))
        assert order.index("event") > last_disable

    run(body)


def test_a_trip_is_not_delayed_by_a_request_that_waits_for_the_disk() -> None:
    async def body(rig: Rig) -> None:
        import asyncio

        await rig.up()
        await rig.gateway.withdraw("detector", Action.WRITE, 0.0)
        await rig.clock.sleep(1.0)
        rig.journal.durable_seconds = 30.0
        waiting = asyncio.create_task(rig.gateway.request("detector", Action.WRITE, 10.0))
        await rig.clock.sleep(0.2)
        since = rig.clock.seconds()
        rig.interlocks.given[0] = 0.0
        await rig.clock.sleep(0.2)
        assert off_after(rig, "detector", since) <= 0.11
        rig.journal.durable_seconds = 0.0
        assert isinstance(await waiting, Trip)  # judged again after the disk: the world has moved on
        assert rig.detector.set == 0.0

    run(body)


def test_a_hung_device_delays_no_other() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        since = rig.clock.seconds()
        rig.accelerating.deaf = 10**6
        rig.interlocks.given[0] = 0.0
        await rig.clock.sleep(0.5)
        for role in ("esa", "detector", "source"):
            assert off_after(rig, role, since) <= 0.11
        assert rig.permit.enabled is False
        sent = [verb for at, verb, _ in rig.accelerating.commands if at >= since and verb == "disable"]
        assert len(sent) == 3
        await rig.clock.sleep(0.2)
        assert "7:accelerating" in [cause.id for cause in rig.supervisor.causes]

    run(body)


def test_nothing_energises_after_a_trip_and_lowering_still_works() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.analyser_gauge.given[0] = 1.0
        await rig.clock.sleep(0.3)
        rig.analyser_gauge.given[0] = 1e-5
        for output in ("accelerating", "esa", "magnet", "detector", "source", "permit"):
            assert isinstance(await rig.gateway.request(output, Action.ENABLE), Trip)
        assert isinstance(await rig.gateway.request("magnet", Action.WRITE, 4.1), Trip)
        assert isinstance(await rig.gateway.request("magnet", Action.WRITE, 3.9), Permit)

    run(body)


def test_before_the_start_a_condition_forbids_and_does_not_trip() -> None:
    async def body(rig: Rig) -> None:
        rig.interlocks.given[0] = 0.0
        findings = await rig.supervisor.prove()
        (cover,) = [each for each in findings if each.what == "cover_a"]
        assert cover.verdict == "fail"
        assert not cover.unreachable
        assert not rig.supervisor.latched
        rig.supervisor.start()
        await rig.clock.sleep(0.1)
        assert rig.supervisor.latched  # started: now it is a condition to continue

    run(body)


@pytest.mark.parametrize(
    ("report", "row", "code", "kind"),
    [
        (lambda rig: rig.supervisor.request_stop("by hand"), "12a", ExitCode.STOPPED, "stop"),
        (lambda rig: rig.supervisor.internal_fault("boom"), "12b", ExitCode.INTERNAL_FAULT, "trip"),
        (lambda rig: setattr(rig.journal, "fault", "no space"), "13", ExitCode.RECORD_AT_RISK, "trip"),
        (
            lambda rig: rig.supervisor.device_failed(DeviceTimeout("esa", "gone")),
            "7",
            ExitCode.TRIPPED,
            "trip",
        ),
        (
            lambda rig: rig.supervisor.device_failed(DeviceTimeout("counter", "gone")),
            "8",
            ExitCode.TRIPPED,
            "trip",
        ),
        (lambda rig: rig.supervisor._board.post("nonsense", "x", ""), "12b", ExitCode.INTERNAL_FAULT, "trip"),
    ],
)
def test_what_is_reported_from_outside_is_judged_at_the_next_tick(report, row, code, kind) -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        report(rig)
        await rig.clock.sleep(0.06)
        assert [(event.cause.row, event.exit_code, event.kind) for event in rig.told] == [(row, code, kind)]
        assert rig.supervisor.latched is (kind == "trip")
        await rig.clock.sleep(4.0)
        assert all(not rig.twins[role].enabled for role in ("accelerating", "esa", "detector", "source"))
        assert len(rig.told) == 1

    run(body)


def test_an_exception_in_the_tick_is_an_internal_fault_and_the_watchdog_starves() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        fed: list[int] = []
        rig.supervisor._watchdog = lambda: fed.append(1)
        plain = rig.journal.telemetry
        await rig.clock.sleep(0.5)
        assert len(fed) == 10

        def fails(*arguments):
            raise ValueError("torn")

        rig.journal.telemetry = fails
        await rig.clock.sleep(0.5)
        assert len(fed) == 10
        rig.journal.telemetry = plain
        assert rig.supervisor.first_out is not None
        assert rig.supervisor.first_out.row == "12b"
        await rig.clock.sleep(0.5)
        assert len(fed) == 20

    run(body)


def test_coil_temperature_holds_first_and_ramps_after_half_a_minute() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        since = rig.clock.seconds()
        rig.interlocks.given[3] = 0.0
        await rig.clock.sleep(20.0)
        assert rig.supervisor.first_out is not None
        assert rig.supervisor.first_out.row == "3"
        assert all(off_after(rig, role, since) == math.inf for role in HV)
        assert off_after(rig, "magnet", since) < 20.0
        await rig.clock.sleep(15.0)
        assert all(30.0 < off_after(rig, role, since) < 35.0 for role in HV)

    run(body)


def test_control_taken_at_the_panel_trips() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.esa.remote = False
        await rig.clock.sleep(0.2)
        assert rig.supervisor.first_out.id == "18:esa.status"

    run(body)


def test_an_output_found_energised_is_a_trip_and_is_brought_down() -> None:
    async def body(rig: Rig) -> None:
        rig.magnet.limits = (10.0, 5.0, 2.0)
        rig.magnet.enabled, rig.magnet.set, rig.magnet.level = True, 3.0, 3.0
        findings = await rig.supervisor.prove(wait=False)
        (state,) = [each for each in findings if each.role == "magnet" and each.what == "state"]
        assert state.verdict == "fail"
        await rig.clock.sleep(0.1)
        assert rig.supervisor.first_out.id == "17:magnet"
        outcome = await rig.supervisor.park("found energised")
        assert outcome.confirmed
        assert not rig.magnet.enabled
        assert steepest(rig, "magnet", 0.0) <= 5.0 * (1 + 1e-9)

    run(body)
