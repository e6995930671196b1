"""Parking: confirmed only where the plant is at zero, and honest everywhere else."""

from __future__ import annotations

import asyncio
from itertools import pairwise

import pytest
from safety_plant import Rig, run

from controller.safety.values import Action, Refusal

HV = ("accelerating", "esa", "detector")


def at_zero(rig: Rig) -> bool:
    """What the plant itself says, whatever was read back."""
    supplies = all(
        not rig.twins[role].enabled and rig.twins[role].settle() <= getattr(rig.instrument, role).safe_volts
        for role in HV
    )
    magnet = not rig.magnet.enabled and rig.magnet.settle() <= rig.instrument.magnet.safe_amps
    return supplies and magnet and not rig.source.enabled and not rig.permit.enabled


@pytest.mark.parametrize("abrupt", [False, True])
def test_parking_is_confirmed_when_the_plant_is_at_zero(abrupt: bool) -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        outcome = await rig.supervisor.park("end", abrupt)
        assert outcome.confirmed, outcome.text()
        assert at_zero(rig)
        assert not rig.supervisor.latched
        assert rig.journal.events("parked")

    run(body)


def test_the_order_is_ions_then_volts_then_the_permit_line() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        since = rig.clock.seconds()
        await rig.supervisor.park("end", abrupt=True)

        def first(role: str) -> float:
            return min(at for at, verb, _ in rig.twins[role].commands if verb == "disable" and at >= since)

        assert first("source") <= min(first(role) for role in HV)
        assert first("permit") >= max(first(role) for role in (*HV, "magnet"))

    run(body)


def lie_stuck(rig: Rig) -> str:
    rig.accelerating.stuck = True
    return "accelerating"


def lie_frozen(rig: Rig) -> str:
    rig.esa.mode = "frozen"
    return "esa"


def lie_silent(rig: Rig) -> str:
    rig.detector.mode = "silent"
    return "detector"


def lie_refusing(rig: Rig) -> str:
    rig.magnet.refuse = 3
    return "magnet"


def lie_deaf(rig: Rig) -> str:
    rig.detector.deaf = 10**6
    return "detector"


def lie_gate(rig: Rig) -> str:
    rig.source.stuck = 1.0
    return "source"


def lie_permit(rig: Rig) -> str:
    rig.permit.stuck = 1.0
    return "permit"


def lie_too_fast(rig: Rig) -> str:
    """The output stays up, the read-back drops to zero at once when it is disabled: a failed sensor."""
    plain = rig.accelerating.obey

    def obey(verb, values):
        if verb == "disable":
            rig.accelerating.gain = 0.0
        return plain(verb, values)

    rig.accelerating.obey = obey
    return "accelerating"


def lie_slow(rig: Rig) -> str:
    rig.esa.tau = 3.0
    return "esa"


@pytest.mark.parametrize("abrupt", [False, True])
@pytest.mark.parametrize(
    "lie", [lie_stuck, lie_frozen, lie_silent, lie_refusing, lie_deaf, lie_gate, lie_permit]
)
def test_what_was_not_seen_is_not_confirmed(lie, abrupt: bool) -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        role = lie(rig)
        began = rig.clock.seconds()
        outcome = await rig.supervisor.park("end", abrupt)
        assert not outcome.confirmed
        by_name = {each.output: each for each in outcome.outputs}
        assert not by_name[role].confirmed
        assert by_name[role].text
        assert role in outcome.text()
        assert rig.clock.seconds() - began < 60.0  # bounded
        for other in {"accelerating", "esa", "detector"} - {role}:
            assert rig.twins[other].settle() <= 50.0
        assert f"19:{role}" in [cause.id for cause in rig.supervisor.causes]
        assert rig.permit.enabled is False
        assert rig.journal.events("unconfirmed")

    run(body)


@pytest.mark.parametrize("lie", [lie_too_fast, lie_slow])
def test_a_decay_that_is_not_the_bleeders_is_not_confirmed(lie) -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        role = lie(rig)
        outcome = await rig.supervisor.park("end", abrupt=True)
        by_name = {each.output: each for each in outcome.outputs}
        assert not by_name[role].confirmed
        assert "decays with" in by_name[role].text

    run(body)


def test_a_rebound_is_seen_and_asked_about_again() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()

        async def absorb() -> None:  # dielectric absorption: some volts come back, once
            await rig.clock.sleep(9.0)
            rig.accelerating.level = 200.0

        task = asyncio.create_task(absorb())
        outcome = await rig.supervisor.park("end", abrupt=True)
        await task
        assert outcome.confirmed
        assert rig.journal.events("rebound")

    run(body)


def test_a_second_caller_joins_the_first_and_cancelling_a_caller_stops_nothing() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        first = asyncio.create_task(rig.supervisor.park("one"))
        await rig.clock.sleep(0.3)
        second = asyncio.create_task(rig.supervisor.park("two"))
        await rig.clock.sleep(0.1)
        first.cancel()
        await asyncio.wait([first])
        assert first.cancelled()
        outcome = await second
        assert outcome.confirmed
        assert at_zero(rig)
        assert len(rig.journal.events("parking")) == 1

    run(body)


def test_an_abrupt_second_caller_hurries_the_first() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        since = rig.clock.seconds()
        first = asyncio.create_task(rig.supervisor.park("gently"))
        await rig.clock.sleep(0.15)
        await rig.supervisor.park("now", abrupt=True)
        assert (await first).confirmed
        off = min(at for at, verb, _ in rig.detector.commands if verb == "disable" and at >= since)
        assert off - since < 0.2  # its ramp would have taken two seconds

    run(body)


def test_parking_does_not_need_the_record() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.journal.broken = True
        rig.journal.durable_seconds = 3600.0
        outcome = await rig.supervisor.park("end")
        assert outcome.confirmed
        assert at_zero(rig)

    run(body)


def test_the_magnet_parks_within_its_slope_even_after_a_long_rest() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        await rig.clock.sleep(30.0)
        since = rig.clock.seconds()
        await rig.supervisor.park("end")
        given = [(since, 4.0), *((at, value) for at, value in rig.magnet.history if at >= since)]
        limit = rig.instrument.magnet.amps_per_second_max
        assert len(given) > 10
        for (t1, a), (t2, b) in pairwise(given):
            assert a - b <= limit * (t2 - t1) * (1 + 1e-9) + 1e-12

    run(body)


def test_a_reset_needs_the_name_the_safe_state_and_the_cause_gone_and_changes_no_output() -> None:
    async def body(rig: Rig) -> None:
        await rig.up()
        rig.interlocks.given[0] = 0.0
        await rig.clock.sleep(0.2)
        supervisor, first = rig.supervisor, "1:interlocks.cover_a"
        assert isinstance(supervisor.reset(first, "ann"), Refusal)  # not confirmed
        assert (await supervisor.park("tripped", abrupt=True)).confirmed
        assert isinstance(supervisor.reset(first, "ann"), Refusal)  # the cover is still open
        rig.interlocks.given[0] = 1.0
        await rig.clock.sleep(1.0)
        assert isinstance(supervisor.reset(first, "ann"), Refusal)  # not shut for long enough
        before = supervisor.causes
        await rig.clock.sleep(5.0)
        assert isinstance(supervisor.reset("1:interlocks.cover_b", "ann"), Refusal)  # another name
        assert supervisor.causes == before
        sent = {role: len(twin.commands) for role, twin in rig.twins.items()}
        assert supervisor.reset(first, "ann") is None
        assert not supervisor.latched
        await rig.clock.sleep(1.0)
        assert {role: len(twin.commands) for role, twin in rig.twins.items()} == sent
        refused = await rig.gateway.request("accelerating", Action.ENABLE)
        assert isinstance(refused, Refusal)  # it permits; it does not restart
        assert "start" in refused.reason

    run(body)
