"""The gateway and the supervisor around the guard: order, concurrency, proving, the record of a tick."""

from __future__ import annotations

import asyncio
from itertools import pairwise

import pytest
from safety_plant import Rig, run

from controller.errors import NotPermitted
from controller.safety.values import Action, Permit, Refusal, Trip
from drivers.clock import NS


def test_a_permit_is_written_before_the_device_is_told() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        order: list[str] = []
        said, told = rig.journal.request, rig.magnet.obey
        rig.journal.request = lambda *a: (order.append("written"), said(*a))[1]
        rig.magnet.obey = lambda verb, v: (order.append("told"), told(verb, v))[1]
        await rig.ask("magnet", Action.WRITE, 4.1)
        assert order == ["written", "told"]

    run(body)


def test_what_energises_first_waits_for_the_disk_and_later_writes_do_not() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        before = rig.journal.durable_calls
        await rig.ask("accelerating", Action.WRITE, 4100.0)
        assert rig.journal.durable_calls == before
        await rig.ask("detector", Action.WRITE, 0.0)
        await rig.clock.sleep(1.0)
        await rig.ask("detector", Action.WRITE, 100.0)
        assert rig.journal.durable_calls == before + 1

    run(body)


def test_a_record_that_fails_energises_nothing_and_trips() -> None:
    async def body(rig: Rig) -> None:
        await rig.supervisor.prove()
        rig.supervisor.start()
        rig.journal.broken = True
        verdict = await rig.gateway.request("magnet", Action.ENABLE)
        assert isinstance(verdict, Trip)
        assert not rig.magnet.enabled
        await rig.clock.sleep(0.1)
        assert rig.supervisor.first_out.row == "13"

    run(body)


def test_a_refused_request_is_recorded_and_never_reaches_the_device() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        sent = len(rig.magnet.commands)
        verdict = await rig.gateway.request("magnet", Action.WRITE, 11.0)
        assert isinstance(verdict, Refusal)
        assert (verdict.value, verdict.limit) == (11.0, rig.instrument.magnet.amps_max)
        assert len(rig.magnet.commands) == sent
        assert rig.journal.requests("magnet")[-1][4] == "refusal"
        unknown = await rig.gateway.request("pump", Action.ENABLE)
        assert isinstance(unknown, Refusal)

    run(body)


def test_the_permit_line_is_closed_with_the_first_output_and_not_by_a_refused_one() -> None:
    async def body(rig: Rig) -> None:
        await rig.supervisor.prove(wait=False)
        rig.supervisor.start()
        assert isinstance(
            await rig.gateway.request("detector", Action.ENABLE), Refusal
        )  # vacuum not held yet
        assert not rig.permit.enabled
        await rig.clock.sleep(5.0)
        await rig.ask("magnet", Action.ENABLE)  # has a chain of its own
        assert not rig.permit.enabled
        await rig.ask("esa", Action.ENABLE)
        assert rig.permit.enabled

    run(body)


def test_two_requests_at_once_do_not_interleave_on_one_output() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        await rig.ask("detector", Action.WRITE, 0.0)
        await rig.clock.sleep(2.0)
        rig.journal.durable_seconds = 0.5
        first = asyncio.create_task(rig.gateway.request("detector", Action.WRITE, 400.0))
        await rig.clock.sleep(0.1)
        second = asyncio.create_task(rig.gateway.request("detector", Action.WRITE, 10.0))
        await asyncio.gather(first, second)
        assert isinstance(first.result(), Permit)
        assert [value for _, value in rig.detector.history[-2:]] == [400.0, 10.0]

    run(body)


def test_a_command_without_an_answer_is_sent_again_and_three_make_a_trip() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.magnet.deaf = 2
        await rig.ask("magnet", Action.WRITE, 4.05)
        assert rig.magnet.set == 4.05
        await rig.clock.sleep(0.1)
        rig.magnet.deaf = 3
        assert isinstance(await rig.gateway.request("magnet", Action.WRITE, 4.1), Trip)
        await rig.clock.sleep(0.06)
        assert rig.supervisor.first_out.id == "7:magnet"

    run(body)


def test_a_withdrawal_refuses_to_energise() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        sent = len(rig.magnet.commands)
        for action, value in ((Action.ENABLE, 0.0), (Action.WRITE, 4.01)):
            assert isinstance(await rig.gateway.withdraw("magnet", action, value), Refusal)
        assert len(rig.magnet.commands) == sent

    run(body)


# --- proving -----------------------------------------------------------------------------------------


def test_nothing_is_permitted_before_proving_and_start() -> None:
    async def body(rig: Rig) -> None:
        await rig.clock.sleep(70.0)
        verdict = await rig.gateway.request("esa", Action.ENABLE)
        assert isinstance(verdict, Refusal)
        with pytest.raises(NotPermitted):
            rig.supervisor.start()
        await rig.supervisor.prove()
        assert isinstance(await rig.gateway.request("esa", Action.ENABLE), Refusal)
        rig.supervisor.start()
        assert isinstance(await rig.gateway.request("esa", Action.ENABLE), Permit)

    run(body)


def wrong_serial(rig: Rig) -> None:
    rig.esa.identity_answer = ("test", rig.instrument.devices.esa.model, "OTHER", "1", True)


def not_simulated(rig: Rig) -> None:
    devices = rig.instrument.devices
    rig.esa.identity_answer = ("test", devices.esa.model, devices.esa.serial, "1", False)


def nobody_there(rig: Rig) -> None:
    rig.esa.identity_answer = None


def wide_limits(rig: Rig) -> None:
    plain = rig.esa.obey
    rig.esa.obey = lambda verb, v: (0.0, 1e6, 1e6, 2.0) if verb == "limits" else plain(verb, v)


def no_watchdog(rig: Rig) -> None:
    plain = rig.esa.obey
    rig.esa.obey = lambda verb, v: (0.0, 1.0, 1.0, 0.0) if verb == "limits" else plain(verb, v)


@pytest.mark.parametrize(
    ("wrong", "what", "unreachable"),
    [
        (wrong_serial, "identity", False),
        (not_simulated, "identity", False),
        (nobody_there, "identity", True),
        (wide_limits, "limits", False),
        (no_watchdog, "limits", False),
    ],
)
def test_a_device_that_is_not_proven_stays_shut(wrong, what: str, unreachable: bool) -> None:
    async def body(rig: Rig) -> None:
        wrong(rig)
        findings = await rig.supervisor.prove()
        failed = [each for each in findings if each.verdict == "fail"]
        assert [(each.role, each.what, each.unreachable) for each in failed] == [("esa", what, unreachable)]
        assert failed[0].next
        with pytest.raises(NotPermitted):
            rig.supervisor.start()

    run(body)


def test_the_devices_are_given_their_limits() -> None:
    async def body(rig: Rig) -> None:
        await rig.supervisor.prove(wait=False)
        magnet = rig.instrument.magnet
        assert rig.magnet.limits == (magnet.amps_max, magnet.amps_per_second_max, 2.0)
        assert rig.detector.limits[0] == rig.instrument.detector.volts_max

    run(body)


def test_proving_without_waiting_says_what_is_still_missing() -> None:
    async def body(rig: Rig) -> None:
        findings = await rig.supervisor.prove(wait=False)
        warned = {(each.role, each.what) for each in findings if each.verdict == "warn"}
        assert warned == {
            ("interlocks", "cover_a"), ("interlocks", "cover_b"), ("analyser_gauge", "pascals"),
        }  # fmt: skip
        assert not [each for each in findings if each.verdict == "fail"]
        assert rig.clock.seconds() < 1.0

    run(body)


# --- the tick ----------------------------------------------------------------------------------------


def test_ticks_are_at_absolute_multiples_and_polls_at_their_own() -> None:
    async def body(rig: Rig) -> None:
        await rig.clock.sleep(10.01)

    rig = run(body)
    period = round(rig.instrument.interlocks.tick * NS)
    rows = rig.journal.telemetry_rows
    assert [at for _, at, _, _ in rows] == [number * period for number in range(len(rows))]
    assert rig.supervisor.overruns == 0
    names = [channel.name for channel in rig.supervisor.channels]
    for role in ("magnet", "water", "interlocks", "analyser_gauge"):
        slot = next(i for i, name in enumerate(names) if name.startswith(f"{role}."))
        heard = [at for _, at, values, _ in rows[1:] if values[slot] == values[slot]]
        poll = round(getattr(rig.instrument.devices, role).poll * NS)
        assert {b - a for a, b in pairwise(heard)} == {poll}, role


def test_a_change_of_quality_is_noted_once_each_way() -> None:
    async def body(rig: Rig) -> None:
        await rig.clock.sleep(1.0)
        rig.counter.mode = "garbled"
        await rig.clock.sleep(10.0)
        rig.counter.mode = ""
        await rig.clock.sleep(10.0)

    rig = run(body)
    notes = [note for _, _, _, note in rig.journal.telemetry_rows if note]
    assert len([note for note in notes if "counter.rate" in note]) == 2
    assert "bad" in notes[0]
    assert "good again" in notes[-1]


def test_waiting_for_a_tick_after_the_end_is_an_error_and_not_a_hang() -> None:
    async def body(rig: Rig) -> None:
        waiting = asyncio.create_task(rig.supervisor.wait_tick())
        await rig.clock.sleep(0)
        await waiting
        rig.supervisor.close()
        await rig.clock.sleep(0.2)
        with pytest.raises(RuntimeError):
            await rig.supervisor.wait_tick()

    run(body)


def test_a_late_tick_in_real_time_is_counted_and_judged() -> None:
    """The same code against the real clock: something blocks the loop for 0.4 s, then for 1.2 s."""
    import time

    from safety_plant import bench_instrument

    from drivers.clock import Clock

    async def main() -> Rig:
        rig = Rig(bench_instrument(), Clock(virtual=False))
        ticking = asyncio.create_task(rig.supervisor.run())
        await asyncio.sleep(0.3)
        assert rig.supervisor.overruns == 0
        time.sleep(0.4)
        await asyncio.sleep(0.12)
        assert rig.supervisor.first_out.row == "12b"
        time.sleep(1.2)
        await asyncio.sleep(0.12)
        rig.supervisor.close()
        await ticking
        return rig

    rig = asyncio.run(main())
    assert rig.supervisor.overruns >= 2
    assert "15b" in [cause.row for cause in rig.supervisor.causes]


def test_equal_runs_make_equal_records() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.interlocks.given[0] = 0.0
        await rig.clock.sleep(0.5)
        await rig.supervisor.park("tripped", abrupt=True)

    one, two = run(body), run(body)
    assert one.journal.lines == two.journal.lines
    assert repr(one.journal.telemetry_rows) == repr(two.journal.telemetry_rows)
