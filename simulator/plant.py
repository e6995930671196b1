"""The plant: magnet, supplies, beam, detectors and services as one machine, with its hardwired chain.

The hardwired chain is the plant's own: an opened cover, the emergency stop or an open permit line
takes the high voltage and the source away whatever any program does.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Callable

import numpy as np

from simulator.beam import Beam
from simulator.detectors import Counter, Electrometer, mean_rate
from simulator.high_voltage import Supply
from simulator.magnet import Magnet, Probe
from simulator.services import CoilHeat, Level
from simulator.spec import PlantSpec, SourceSpec, SpeciesSpec, TruthEvent

HIGH_VOLTAGE = ("accelerating", "esa", "detector")
CHAIN_SECONDS = 0.05  # contactor opening time
DISTURBED_PARTS = 200  # of a gate in which something was changed


class TruthLog:
    """What really happened, in order; written by the plant, read by tests."""

    def __init__(self) -> None:
        self.events: list[TruthEvent] = []

    def add(self, at: float, what: str, value: float = 0.0) -> None:
        self.events.append(TruthEvent(at, what, value))


class Timeline:
    """What will happen by itself: due when somebody next looks at the plant at or after its time."""

    def __init__(self) -> None:
        self._due: list[tuple[float, int, Callable[[float], None]]] = []
        self._added = 0
        self.next = math.inf

    def add(self, at: float, action: Callable[[float], None]) -> None:
        self._added += 1
        heapq.heappush(self._due, (at, self._added, action))
        self.next = self._due[0][0]

    def catch_up(self, t: float) -> None:
        """Do everything due by ``t``, each at its own time and in order."""
        while self._due and self._due[0][0] <= t:
            at, _, action = heapq.heappop(self._due)
            self.next = self._due[0][0] if self._due else math.inf
            action(at)


class Plant:
    """All truths as functions of time, and the commands that change them."""

    def __init__(
        self, spec: PlantSpec, source: SourceSpec, species: tuple[SpeciesSpec, ...], *, seed: int
    ) -> None:
        streams = iter(np.random.default_rng(seed).spawn(16))
        self.spec = spec
        self.log = TruthLog()
        self.timeline = Timeline()
        self.magnet = Magnet(spec.magnet, next(streams))
        self.probe = Probe(spec.magnet, next(streams))
        self.supplies = {
            "accelerating": Supply(spec.accelerating, next(streams)),
            "esa": Supply(spec.esa, next(streams)),
            "detector": Supply(spec.detector, next(streams)),
        }
        self.beam = Beam(spec.optics, source, species, nominal_volts=spec.nominal_volts, rng=next(streams))
        self.counter = Counter(spec.detectors, next(streams))
        self.electrometer = Electrometer(spec.detectors, next(streams))
        services = spec.services
        self.source_pressure = Level(services.source_pascals, 1.0, logarithmic=True)
        self.analyser_pressure = Level(services.analyser_pascals, 1.0, logarithmic=True)
        self.flow = Level(services.flow, services.pump_seconds, logarithmic=False)
        self.coil = CoilHeat()
        self.inputs = {"cover_a": 1.0, "cover_b": 1.0, "emergency_stop": 1.0, "thermostat": 1.0, "mains": 1.0}
        self.source_open = False
        self.permit_closed = False
        self._source_changes: list[tuple[float, bool]] = [(0.0, False)]
        self.noise_streams = streams

    # --- commands --------------------------------------------------------------------------------

    def before_change(self, t: float) -> None:
        """The beam is about to change: the slow detector has followed the old one until now."""
        self.electrometer.advance(t, self.ions(t))

    def write(self, t: float, role: str, volts: float) -> None:
        self.before_change(t)
        self.supplies[role].write(t, volts)
        self.log.add(t, f"{role} set", volts)

    def enable(self, t: float, role: str) -> bool:
        """False where the chain is open."""
        if not self.chain_closed():
            return False
        self.before_change(t)
        self.supplies[role].enable(t)
        self.log.add(t, f"{role} on")
        return True

    def disable(self, t: float, role: str) -> None:
        self.before_change(t)
        self.supplies[role].disable(t)
        self.log.add(t, f"{role} off")

    def set_source(self, t: float, *, is_open: bool) -> bool:
        if is_open and not self.chain_closed():
            return False
        self.before_change(t)
        self.source_open = is_open
        self._source_changes.append((t, is_open))
        del self._source_changes[:-50]
        self.log.add(t, "source open" if is_open else "source shut")
        return True

    def set_permit(self, t: float, *, closed: bool) -> None:
        self.permit_closed = closed
        self.log.add(t, "permit closed" if closed else "permit open")
        if not closed:
            self.cut(t)

    def set_input(self, t: float, name: str, value: float) -> None:
        self.inputs[name] = value
        self.log.add(t, f"input {name}", value)
        if not self.chain_closed() and self.spec.services.hardwired_chain:
            self.timeline.add(t + CHAIN_SECONDS, self._drop_out)

    def _drop_out(self, t: float) -> None:
        """The contactor has had its time: it drops unless the chain was closed again meanwhile."""
        if not self.chain_closed():
            self.cut(t)

    def chain_closed(self) -> bool:
        healthy = all(self.inputs[name] for name in ("cover_a", "cover_b", "emergency_stop"))
        return self.permit_closed and (healthy or not self.spec.services.hardwired_chain)

    def cut(self, t: float) -> None:
        """The chain opens: high voltage and source away; never the magnet."""
        self.before_change(t)
        for supply in self.supplies.values():
            supply.cut(t)
        if self.source_open:
            self.source_open = False
            self._source_changes.append((t, False))
        self.log.add(t, "chain cut")

    # --- truths ----------------------------------------------------------------------------------

    def ions(self, t: float) -> float:
        """True ions per second on the collector."""
        if not self._source_was_open(t):
            return 0.0
        supplies = self.supplies
        return self.beam.rate(
            t, self.magnet.tesla(t), supplies["esa"].volts(t), supplies["accelerating"].volts(t)
        )

    def _source_was_open(self, t: float) -> bool:
        answer = False
        for at, is_open in self._source_changes:
            if at <= t:
                answer = is_open
        return answer

    def mean_ions(self, start: float, end: float, share: Callable[[float], float] | None = None) -> float:
        """Mean over a gate of ``ions`` (times a share that changes with time), in 1/s.

        A gate in which a source or a high voltage was changed is cut there, and into fine parts: what
        follows a change may end at any time after it.
        """
        cuts = {at for at, _ in self._source_changes if start < at < end}
        for role in HIGH_VOLTAGE if share is not None else ("accelerating", "esa"):
            cuts.update(self.supplies[role].events_between(start, end))
        if cuts or share is not None:
            cuts.update(start + (end - start) * part / DISTURBED_PARTS for part in range(1, DISTURBED_PARTS))
        if share is None:
            return mean_rate(self.ions, start, end, sorted(cuts))
        return mean_rate(lambda t: self.ions(t) * share(t), start, end, sorted(cuts))
