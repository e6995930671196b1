"""Proving: who is there, what limits do they hold, what is energised, what forbids a start.

Outputs are presumed energised until they read back zero. Nothing here energises anything.
"""

from __future__ import annotations

from collections.abc import Awaitable, Callable, Mapping
from typing import NamedTuple

from controller.config.instrument import DeviceSettings, Instrument
from controller.safety.board import Board
from controller.safety.gateway import Gateway
from controller.safety.interlocks import HEALTHY, NS
from controller.safety.values import OUTPUTS, PERMIT, SUPPLIES, usable
from controller.safety.words import WORDS
from drivers.clock import Clock
from drivers.contract import DeviceError, Identity, Limits, Monitor, Quality

WATCHDOG_SECONDS = 2.0  # layer 3: the device's own; output off when it has not been addressed for so long
FIRST_WORD_SECONDS = 2.0  # for every device to be heard once
GRACE_SECONDS = 1.0  # a permissive that does not hold by then is not about to


class Finding(NamedTuple):
    """One thing looked at. ``next`` is the one thing to do if it is not a pass."""

    role: str
    what: str
    verdict: str  # "pass" | "warn" | "fail"
    text: str
    next: str
    unreachable: bool = False


class Prover:
    """Looks at the whole instrument before anything is asked of it."""

    def __init__(
        self,
        instrument: Instrument,
        board: Board,
        gateway: Gateway,
        monitors: Mapping[str, Monitor],
        clock: Clock,
        *,
        wait_tick: Callable[[], Awaitable[None]],
    ) -> None:
        self._instrument, self._board, self._gateway = instrument, board, gateway
        self._monitors, self._clock, self._wait_tick = monitors, clock, wait_tick
        self._units = {c.name: f" {c.unit}" if c.unit else "" for m in monitors.values() for c in m.channels}

    async def prove(self, *, wait: bool) -> list[Finding]:
        """All findings in a fixed order. ``wait``: let permissives that hold mature for their time."""
        findings: list[Finding] = []
        sound: dict[str, bool] = {}
        await self._first_words()
        for role, monitor in self._monitors.items():
            sound[role] = self._add(findings, await self._identity(role, monitor))
        for output in SUPPLIES:
            name = OUTPUTS[output]
            if sound[name]:
                sound[name] = self._add(findings, await self._limits(output))
        for output, name in enumerate(OUTPUTS):
            findings.append(self._state(output, proven=sound[name]))
        if wait:
            await self._mature()
        findings.extend(self._permissives())
        return findings

    @staticmethod
    def _add(findings: list[Finding], finding: Finding) -> bool:
        findings.append(finding)
        return finding.verdict == "pass"

    async def _first_words(self) -> None:
        until = self._clock.mono_ns() + round(FIRST_WORD_SECONDS * NS)
        while self._clock.mono_ns() <= until:
            await self._wait_tick()
            if all(reading.at_ns >= 0 for reading in self._board.snapshot.readings):
                return

    # --- devices ---------------------------------------------------------------------------------

    async def _identity(self, role: str, monitor: Monitor) -> Finding:
        wanted: DeviceSettings = getattr(self._instrument.devices, role)
        try:
            identity: Identity = await monitor.identify()
        except DeviceError as error:
            return Finding(role, "identity", "fail", str(error), "look at the line and the power", True)
        simulated = self._instrument.kind == "simulated"
        who = f"{identity.model} {identity.serial}"
        if (identity.model, identity.serial) != (wanted.model, wanted.serial):
            text = f"{who} answered; the instrument file names {wanted.model} {wanted.serial}"
            return Finding(role, "identity", "fail", text, "correct the wiring or the file", False)
        if identity.simulated != simulated:
            text = (
                f"{who} says simulated={identity.simulated}; the instrument file says {self._instrument.kind}"
            )
            return Finding(role, "identity", "fail", text, "use the right instrument file", False)
        return Finding(role, "identity", "pass", f"{who}, firmware {identity.firmware}", "")

    async def _limits(self, output: int) -> Finding:
        name, limits = OUTPUTS[output], self._board.envelope.outputs[output]
        wanted = Limits(limits.maximum, limits.per_second, WATCHDOG_SECONDS)
        try:
            held = await self._gateway.prove_limits(name, wanted)
        except DeviceError as error:
            return Finding(name, "limits", "fail", str(error), "look at the line and the device", True)
        if not (
            0 < held.maximum <= wanted.maximum
            and 0 < held.slew_per_second <= wanted.slew_per_second
            and 0 < held.watchdog_seconds <= wanted.watchdog_seconds
        ):
            text = f"the device holds {tuple(held)}, wider than {tuple(wanted)}"
            return Finding(name, "limits", "fail", text, "set the device's own limits by hand")
        unit = self._units[self._board.envelope.channels[limits.read_slots[0]]].strip()
        text = (
            f"{held.maximum:g} {unit}, {held.slew_per_second:g} {unit}/s, "
            f"device watchdog {held.watchdog_seconds:g} s"
        )
        return Finding(name, "limits", "pass", text, "")

    def _state(self, output: int, *, proven: bool) -> Finding:
        """Adopt what the output reads back; energised is row 17."""
        board, limits, name = self._board, self._board.envelope.outputs[output], OUTPUTS[output]
        now, readings = self._clock.mono_ns(), board.snapshot.readings
        slots = [slot for slot in (*limits.read_slots, limits.set_slot, limits.status_slot) if slot >= 0]
        lost = [readings[slot] for slot in slots if not usable(readings[slot], now, limits.stale_ns)]
        if lost:
            text = f"{lost[0].source} cannot be read: {lost[0].detail or 'too old'}"
            return Finding(name, "state", "fail", text, "look at the line", lost[0].quality is Quality.ABSENT)
        reads = max(abs(readings[slot].value) for slot in limits.read_slots)
        unit = self._units[board.envelope.channels[limits.read_slots[0]]]
        enabled = limits.status_slot >= 0 and bool(int(readings[limits.status_slot].value) & 1)
        if output == PERMIT:
            enabled = reads > limits.safe
        if reads > limits.safe or enabled:
            demand = readings[limits.set_slot].value if limits.set_slot >= 0 else reads
            board.adopt(output, demand=max(demand, 0.0), enabled=enabled, proven=proven)
            text = f"reads {reads:.4g}{unit}, {'enabled' if enabled else 'disabled'}"
            board.post("17", name, text)
            return Finding(name, "state", "fail", f"found energised: {text}", WORDS["17"][1])
        board.adopt(output, demand=0.0, enabled=False, proven=proven)
        return Finding(name, "state", "pass", f"off, reads {reads:.2g}{unit}", "")

    # --- permissives -----------------------------------------------------------------------------

    def _hold_ns(self, number: int) -> int:
        envelope = self._board.envelope
        if number == envelope.analyser_bound:
            return envelope.analyser_hold_ns
        return envelope.cover_hold_ns if number in envelope.covers else 0

    async def _mature(self) -> None:
        """Wait while everything holds and only time is missing."""
        begun = self._clock.mono_ns()
        while True:
            await self._wait_tick()
            now, held = self._clock.mono_ns(), self._board.latches.held
            if self._board.latches.first_out is not None:
                return
            if -1 in held and now - begun >= round(GRACE_SECONDS * NS):
                return
            if all(since >= 0 and now - since >= self._hold_ns(number) for number, since in enumerate(held)):
                return

    def _permissives(self) -> list[Finding]:
        board, now = self._board, self._clock.mono_ns()
        found = []
        for number, bound in enumerate(board.envelope.bounds):
            reading, held = board.snapshot.readings[bound.slot], board.latches.held[number]
            hold = self._hold_ns(number)
            role, _, quantity = bound.source.partition(".")
            unit = self._units[bound.source]
            value = f"{reading.value:.4g}{unit}" if reading.quality is Quality.GOOD else reading.detail
            if held < 0:
                limits = f"permitted {bound.permit_low:g} to {bound.permit_high:g}{unit}"
                text = f"{value} ({limits}), row {bound.row}"
                found.append(Finding(role, quantity, "fail", text, WORDS[bound.row][1]))
            elif now - held < hold:
                text = f"{value}, has held {(now - held) / NS:.0f} of {hold / NS:.0f} s"
                found.append(Finding(role, quantity, "warn", text, "wait"))
            else:
                found.append(Finding(role, quantity, "pass", value, ""))
        for source, slot, stale_ns in board.envelope.statuses:
            reading = board.snapshot.readings[slot]
            role, _, quantity = source.partition(".")
            if usable(reading, now, stale_ns) and reading.value not in HEALTHY:
                text = f"status {reading.value:g}: tripped by itself, or not in remote control"
                found.append(
                    Finding(role, quantity, "fail", text, "reset it at its panel, give it to remote")
                )
        return found
