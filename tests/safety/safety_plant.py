"""A small plant of twins for the safety tests, and the whole safety layer wired to it in virtual time.

Written from docs/telegrams.md. It is not the product's simulator: supplies that slew and bleed, inputs
that are what the test says, and every way of lying that a test needs.
"""

from __future__ import annotations

import asyncio
import math
import tomllib
from collections.abc import Awaitable, Callable
from pathlib import Path

from controller.config.instrument import Instrument
from controller.errors import RecordAtRisk
from controller.safety.assembly import ROLES, Safety, assemble
from controller.safety.reflex import SupervisorEvent
from controller.safety.values import Action, Permit
from drivers.clock import Clock, VirtualLoop
from drivers.contract import Opened
from drivers.inprocess import InProcessLink
from drivers.registry import open_device

FILE = Path(__file__).parents[2] / "configs" / "bench" / "instrument.toml"


def bench_instrument() -> Instrument:
    """The shipped instrument file."""
    with FILE.open("rb") as file:
        return Instrument.model_validate(tomllib.load(file))


class Twin:
    """One device. ``mode`` says how it misbehaves: "", "silent", "frozen", "garbled"."""

    def __init__(self, role: str, settings: object, seconds: Callable[[], float]) -> None:
        self.role, self.seconds = role, seconds
        self.identity_answer: object = ("test", settings.model, settings.serial, "1", True)
        self.mode = ""
        self.sequence = 0
        self.commands: list[tuple[float, str, tuple[float, ...]]] = []
        self.deaf = 0  # commands that get no answer
        self.refuse = 0  # code given to every command
        self.enabled, self.remote, self.tripped = False, True, False

    def values(self) -> tuple[float, ...]:
        raise NotImplementedError

    def identity(self) -> object:
        return self.identity_answer

    def status(self) -> int:
        return self.enabled + 2 * self.remote + 4 * self.tripped

    def report(self) -> object:
        if self.mode == "silent":
            return None
        if self.mode == "garbled":
            return (self.sequence, "?")
        if self.mode != "frozen":
            self.sequence += 1
        return (self.sequence, self.status(), self.values())

    def command(self, verb: str, *values: float) -> object:
        self.commands.append((self.seconds(), verb, values))
        if self.deaf:
            self.deaf -= 1
            return None
        if self.refuse:
            return (float(self.refuse),)
        return self.obey(verb, values)

    def obey(self, verb: str, values: tuple[float, ...]) -> tuple[float, ...]:
        if verb in ("enable", "disable"):
            self.enabled = verb == "enable"
            return (0.0,)
        return (1.0,)


class Inputs(Twin):
    """A device without an output: it reports what the test says."""

    def __init__(self, role, settings, seconds, values) -> None:
        super().__init__(role, settings, seconds)
        self.given = list(values)

    def values(self) -> tuple[float, ...]:
        return tuple(self.given)


class Gate(Twin):
    """Source gate or permit line. ``stuck`` keeps its read-back where it is."""

    def __init__(self, role, settings, seconds) -> None:
        super().__init__(role, settings, seconds)
        self.stuck: float | None = None

    def values(self) -> tuple[float, ...]:
        return (float(self.enabled) if self.stuck is None else self.stuck,)


class Supply(Twin):
    """Slews to its set-point when enabled, decays when not, and lies on demand."""

    def __init__(self, role, settings, seconds, *, tau: float, resting: tuple[float, ...] = ()) -> None:
        super().__init__(role, settings, seconds)
        self.tau, self.resting = tau, resting
        self.set = self.level = self.peak = 0.0
        self.at = 0.0
        self.limits = (math.inf, math.inf, 0.0)
        self.stuck = False  # the output does not obey, whatever is answered
        self.gain = 1.0  # read-back per output
        self.history: list[tuple[float, float]] = []

    def settle(self) -> float:
        now = self.seconds()
        dt, self.at = now - self.at, now
        if self.stuck:
            return self.level
        if not self.enabled:
            self.level *= math.exp(-dt / self.tau)
        else:
            room = self.limits[1] * dt
            if self.set < self.level:  # no sink: the bleeder has to do it
                self.level = max(self.set, self.level * math.exp(-dt / self.tau), self.level - room)
            else:
                self.level = min(self.set, self.level + room)
        self.peak = max(self.peak, self.level)
        return self.level

    def obey(self, verb, values):
        self.settle()
        if verb == "set":
            self.history.append((self.seconds(), values[0]))
            if values[0] > self.limits[0]:
                return (2.0,)
            self.set = values[0]
            return (0.0,)
        if verb == "set_limits":
            self.limits = tuple(values)
            return (0.0,)
        if verb == "limits":
            return (0.0, *self.limits)
        return super().obey(verb, values)

    def values(self) -> tuple[float, ...]:
        level = self.settle() * self.gain
        if self.role == "magnet":
            return (level, 2 * level, self.set, 300.0)
        if self.role == "esa":
            return (level / 2, -level / 2, self.set, 1e-6)
        return (level, 1e-6, self.set)


class Journal:
    """Remembers everything; ``broken`` makes it fail like a full disk."""

    def __init__(self) -> None:
        self.fault: str | None = None
        self.lines: list[tuple[object, ...]] = []
        self.telemetry_rows: list[tuple[int, int, list[float | None], str | None]] = []
        self.durable_calls = 0
        self.broken = False
        self.durable_seconds = 0.0

    def telemetry(self, tick, at_ns, values, notes) -> None:
        self.telemetry_rows.append((tick, at_ns, list(values), notes))

    def request(self, at_ns, output, action, value, verdict, reason, *compared) -> None:
        self.lines.append(("request", at_ns, output, action, value, verdict, reason))

    def state(self, at_ns, source, event, target) -> None:
        self.lines.append(("state", at_ns, source, event, target))

    def event(self, at_ns, severity, kind, source, text, data=None) -> None:
        self.lines.append(("event", at_ns, severity, kind, source, text))

    def reading(self, row) -> None:
        self.lines.append(("reading", row))

    async def durable(self) -> None:
        self.durable_calls += 1
        if self.durable_seconds:
            await asyncio.sleep(self.durable_seconds)
        if self.broken:
            raise RecordAtRisk("no space left")

    def requests(self, output: str) -> list[tuple[object, ...]]:
        return [line[1:] for line in self.lines if line[0] == "request" and line[2] == output]

    def events(self, kind: str) -> list[tuple[object, ...]]:
        return [line[1:] for line in self.lines if line[0] == "event" and line[3] == kind]


class Rig:
    """The plant, the safety layer and what the listener was told."""

    def __init__(self, instrument: Instrument, clock: Clock, watchdog=None) -> None:
        self.instrument, self.clock = instrument, clock
        devices, seconds = instrument.devices, clock.seconds
        bleed = instrument.accelerating.bleed_seconds
        self.twins: dict[str, Twin] = {
            "magnet": Supply("magnet", devices.magnet, seconds, tau=1.0),
            "probe": Inputs("probe", devices.probe, seconds, [0.5]),
            "accelerating": Supply("accelerating", devices.accelerating, seconds, tau=bleed),
            "esa": Supply("esa", devices.esa, seconds, tau=bleed),
            "detector": Supply("detector", devices.detector, seconds, tau=bleed),
            "source": Gate("source", devices.source, seconds),
            "counter": Inputs("counter", devices.counter, seconds, [0.0]),
            "electrometer": Inputs("electrometer", devices.electrometer, seconds, [0.0]),
            "source_gauge": Inputs("source_gauge", devices.source_gauge, seconds, [1e-3]),
            "analyser_gauge": Inputs("analyser_gauge", devices.analyser_gauge, seconds, [1e-5]),
            "water": Inputs("water", devices.water, seconds, [1e-4, 1.0]),
            "interlocks": Inputs("interlocks", devices.interlocks, seconds, [1.0] * 5),
            "permit": Gate("permit", devices.permit, seconds),
        }
        self.opened: dict[str, Opened] = {
            role: open_device(
                role, getattr(devices, role).driver, InProcessLink(role, self.twins[role]), clock.mono_ns
            )
            for role in ROLES
        }
        self.journal = Journal()
        self.safety: Safety = assemble(instrument, self.opened, clock, self.journal, watchdog=watchdog)
        self.supervisor, self.gateway = self.safety
        self.told: list[SupervisorEvent] = []
        self.supervisor.listener = self.told.append

    def __getattr__(self, name: str):
        twins = self.__dict__.get("twins", {})
        if name in twins:
            return twins[name]
        raise AttributeError(name)

    async def ask(self, output: str, action: Action, value: float = 0.0) -> None:
        verdict = await self.gateway.request(output, action, value)
        assert isinstance(verdict, Permit), f"{output} {action} {value}: {verdict}"

    async def ramp(self, output: str, target: float, step: float, seconds: float) -> None:
        value = 0.0
        while value < target:
            value = min(value + step, target)
            await self.ask(output, Action.WRITE, value)
            await self.clock.sleep(seconds)

    async def up(self) -> None:
        """Prove, start, and bring everything to working values."""
        findings = await self.supervisor.prove()
        assert [each for each in findings if each.verdict != "pass"] == []
        self.supervisor.start()
        for output in ("esa", "accelerating", "detector", "magnet"):
            await self.ask(output, Action.ENABLE)
        for step in range(1, 5):
            await self.ask("accelerating", Action.WRITE, 1000.0 * step)
            await self.ask("esa", Action.WRITE, 120.0 * step)
            await self.clock.sleep(0.15)
        await self.ramp("detector", 2000.0, 400.0, 0.5)
        await self.ask("source", Action.ENABLE)
        await self.ramp("magnet", 4.0, 0.24, 0.05)
        await self.clock.sleep(3.0)
        assert not self.supervisor.latched, self.told


def run(body: Callable[[Rig], Awaitable[None]], *, change: Callable[[dict], None] | None = None) -> Rig:
    """Run ``body`` beside a ticking supervisor in virtual time."""

    async def main() -> Rig:
        with FILE.open("rb") as file:
            settings = tomllib.load(file)
        if change is not None:
            change(settings)
        rig = Rig(Instrument.model_validate(settings), Clock(virtual=True))
        ticking = asyncio.create_task(rig.supervisor.run())
        try:
            await body(rig)
        finally:
            rig.supervisor.close()
            await ticking
        return rig

    with asyncio.Runner(loop_factory=VirtualLoop) as runner:
        return runner.run(main())
