"""The devices' twins, one class a family, from docs/telegrams.md."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from simulator.plant import Plant
from simulator.twin import (
    DONE,
    ENABLED,
    GATE,
    HAS_TRIPPED,
    MOVING,
    NOT_READY,
    REMOTE,
    TRIPPED,
    UNKNOWN,
    Answer,
    OutputTwin,
    Twin,
)

RATEMETER_SECONDS = 0.1
GAUGE_NOISE = 0.01  # of the reading
FLOW_NOISE = 0.005


class MagnetTwin(OutputTwin):
    def __init__(self, plant: Plant, now: Callable[[], float], rng: np.random.Generator) -> None:
        spec = plant.spec.magnet
        super().__init__("magnet", plant, now, rng, (spec.amps_max, spec.slew))
        self.set_amps = 0.0
        self.stuck = False
        self.deviation = 0.0  # fault: the supply drives this fraction more than it was asked
        self._warm = (-1.0, 293.0)

    def status(self, t: float) -> int:
        magnet = self.plant.magnet
        return REMOTE | (ENABLED if magnet.enabled else 0) | (MOVING if magnet.moving(t) else 0)

    def values(self, t: float) -> tuple[float, ...]:
        magnet = self.plant.magnet
        amps = magnet.amps(t)
        return (amps + 1e-5 * self.normal(), magnet.coil_volts(t), self.set_amps, self._kelvin(t, amps))

    def _kelvin(self, t: float, amps: float) -> float:
        # the coil is slow: once a second is plenty
        if t - self._warm[0] >= 1.0:
            plant = self.plant
            water = plant.flow.at(t) > 0.5 * plant.spec.services.flow
            watts = amps * amps * plant.spec.magnet.resistance
            self._warm = (t, plant.coil.advance(t, watts, water=water))
        return self._warm[1]

    def apply(self, t: float, value: float) -> Answer:
        self.set_amps = value
        if self.plant.magnet.enabled and not self.stuck:
            self._drive(t)
        self.plant.log.add(t, "magnet set", value)
        return (DONE,)

    def turn_on(self, t: float) -> Answer:
        self.plant.magnet.enabled = True
        if not self.stuck:
            self._drive(t)
        self.plant.log.add(t, "magnet on")
        return (DONE,)

    def _drive(self, t: float) -> None:
        self.plant.magnet.command(t, self.set_amps * (1.0 + self.deviation))

    def deviate(self, t: float, fraction: float) -> None:
        """Fault: from now on the current is off by a fraction of what was asked."""
        self.deviation = fraction
        if not self.stuck:
            self._drive(t)

    def stick(self) -> None:
        """Fault: from now on commands are acknowledged and the current does not follow."""
        self.stuck = True

    def release(self, t: float) -> None:
        """The current follows again, to what it was told while it did not."""
        self.stuck = False
        self._drive(t)  # a supply that was switched off meanwhile was set to zero

    def hold_slew(self, per_second: float) -> None:
        self.plant.magnet.slew = per_second

    def turn_off(self, t: float) -> None:
        """The device ramps down by itself before it opens anything."""
        self.set_amps = 0.0
        if not self.stuck:
            self.plant.magnet.command(t, 0.0)
        self.plant.magnet.enabled = False
        self.plant.log.add(t, "magnet off")

    def is_on(self) -> bool:
        return self.plant.magnet.enabled


class ProbeTwin(Twin):
    def values(self, t: float) -> tuple[float, ...]:
        return (self.plant.probe.reading(t, self.plant.magnet.tesla, self.normal),)


class SupplyTwin(OutputTwin):
    """Accelerating or detector supply."""

    LEAK_OHM = 1e10

    def __init__(self, role: str, plant: Plant, now: Callable[[], float], rng: np.random.Generator) -> None:
        self.supply = plant.supplies[role]
        super().__init__(role, plant, now, rng, (self.supply.spec.volts_max, self.supply.spec.slew))
        self._noise = self.supply.spec.read_noise * self.supply.spec.volts_max

    def status(self, t: float) -> int:
        supply = self.supply
        bits = REMOTE | ENABLED if supply.enabled else REMOTE
        if supply.tripped:
            bits |= TRIPPED
        if supply.moving(t):
            bits |= MOVING
        return bits

    def values(self, t: float) -> tuple[float, ...]:
        volts = self._volts(t)
        return (volts + self._noise * self.normal(), self._amps(t, volts), self.supply.set_point)

    def _volts(self, t: float) -> float:
        supply = self.supply
        return supply.nominal(t) * (1.0 + supply.deviation)

    def _amps(self, t: float, volts: float) -> float:
        if t < self.supply.arc_until:
            return 5e-3
        return volts / self.LEAK_OHM

    def apply(self, t: float, value: float) -> Answer:
        self.plant.write(t, self.role, value)
        return (DONE,)

    def hold_slew(self, per_second: float) -> None:
        self.supply.slew = per_second

    def turn_on(self, t: float) -> Answer:
        if self.supply.tripped:
            return (HAS_TRIPPED,)
        return (DONE,) if self.plant.enable(t, self.role) else (NOT_READY,)

    def turn_off(self, t: float) -> None:
        self.supply.set_point = 0.0
        self.plant.disable(t, self.role)

    def is_on(self) -> bool:
        return self.supply.enabled

    def clear_trip(self) -> Answer:
        self.supply.tripped = False
        return (DONE,)


class EsaTwin(SupplyTwin):
    """Two halves, plus and minus half the difference."""

    def values(self, t: float) -> tuple[float, ...]:
        volts = self._volts(t)
        half, noise, normal = 0.5 * volts, self._noise, self.normal
        return (
            half + noise * normal(),
            noise * normal() - half,
            self.supply.set_point,
            self._amps(t, volts),
        )


class SourceTwin(Twin):
    def status(self, t: float) -> int:
        return REMOTE | (ENABLED if self.plant.source_open else 0)

    def values(self, t: float) -> tuple[float, ...]:
        return (1.0 if self.plant.source_open else 0.0,)

    def obey(self, t: float, verb: str, values: tuple[float, ...]) -> Answer:
        if verb in ("enable", "disable"):
            done = self.plant.set_source(t, is_open=verb == "enable")
            return (DONE,) if done else (NOT_READY,)
        return (UNKNOWN,)


class PermitTwin(Twin):
    def status(self, t: float) -> int:
        return REMOTE | (ENABLED if self.plant.permit_closed else 0)

    def values(self, t: float) -> tuple[float, ...]:
        return (1.0 if self.plant.permit_closed else 0.0,)

    def obey(self, t: float, verb: str, values: tuple[float, ...]) -> Answer:
        if verb in ("enable", "disable"):
            self.plant.set_permit(t, closed=verb == "enable")
            return (DONE,)
        return (UNKNOWN,)


class GateTwin(Twin):
    """A detector's gate: opened now, integrated when it is first read."""

    def __init__(self, role: str, plant: Plant, now: Callable[[], float], rng: np.random.Generator) -> None:
        super().__init__(role, plant, now, rng)
        self.gate: tuple[float, float] | None = None
        self._answer: Answer = None  # of a gate that was read: it has one total, however often it is asked

    def status(self, t: float) -> int:
        return REMOTE | (GATE if self.gate is not None and t < self.gate[1] else 0)

    def obey(self, t: float, verb: str, values: tuple[float, ...]) -> Answer:
        if verb == "gate":
            if len(values) != 1 or not 0.0 < values[0] <= 3600.0:
                return (2.0,)
            self.opened(t)
            self.gate, self._answer = (t, t + values[0]), None
            return (DONE,)
        if verb == "gate_read":
            if self.gate is None or t < self.gate[1] - 1e-9:
                return (NOT_READY,)
            if self._answer is None:
                start, end = self.gate
                total, over = self.integrate(start, end)
                self._answer = (DONE, start, end, end - start, total, 1.0 if over else 0.0)
            return self._answer
        return (UNKNOWN,)

    def opened(self, t: float) -> None:
        """Called when a gate opens."""

    def integrate(self, start: float, end: float) -> tuple[float, bool]:
        raise NotImplementedError


class CounterTwin(GateTwin):
    def values(self, t: float) -> tuple[float, ...]:
        plant = self.plant
        efficiency = plant.counter.efficiency(plant.supplies["detector"].nominal(t))
        observed = plant.counter.observed_rate(plant.ions(t) * efficiency + plant.spec.detectors.dark_rate)
        expected = observed * RATEMETER_SECONDS
        return (max(0.0, observed + self.normal() * expected**0.5 / RATEMETER_SECONDS),)

    def integrate(self, start: float, end: float) -> tuple[float, bool]:
        plant = self.plant
        detector, efficiency = plant.supplies["detector"], plant.counter.efficiency
        if detector.steady(start, end):
            rate = plant.mean_ions(start, end) * efficiency(detector.volts(end))
        else:
            rate = plant.mean_ions(start, end, lambda t: efficiency(detector.volts(t)))
        return plant.counter.draw(rate, end - start), rate > plant.spec.detectors.rate_max


class ElectrometerTwin(GateTwin):
    def values(self, t: float) -> tuple[float, ...]:
        volts = self.plant.electrometer.advance(t, self.plant.ions(t))
        return (volts + 1e-4 * self.normal(),)

    def opened(self, t: float) -> None:
        self.plant.electrometer.open_gate(t, self.plant.ions(t))

    def integrate(self, start: float, end: float) -> tuple[float, bool]:
        rate = self.plant.mean_ions(start, end)
        total = self.plant.electrometer.draw(rate, end - start)
        return total, abs(total) > self.plant.spec.detectors.electrometer_volts_max * (end - start)


class GaugeTwin(Twin):
    def __init__(self, role: str, plant: Plant, now: Callable[[], float], rng: np.random.Generator) -> None:
        super().__init__(role, plant, now, rng)
        self._level = plant.source_pressure if role == "source_gauge" else plant.analyser_pressure

    def values(self, t: float) -> tuple[float, ...]:
        return (self._level.at(t) * (1.0 + GAUGE_NOISE * self.normal()),)


class WaterTwin(Twin):
    def values(self, t: float) -> tuple[float, ...]:
        flow = self.plant.flow.at(t)
        made = 1.0 if flow > 0.4 * self.plant.spec.services.flow else 0.0
        return (max(0.0, flow * (1.0 + FLOW_NOISE * self.normal())), made)


class InterlocksTwin(Twin):
    def values(self, t: float) -> tuple[float, ...]:
        return tuple(self.plant.inputs.values())


def make_twins(plant: Plant, now: Callable[[], float]) -> dict[str, Any]:
    """All twins by role; each with a generator of its own."""
    streams = iter(next(plant.noise_streams).spawn(13))
    twins: dict[str, Any] = {
        "magnet": MagnetTwin(plant, now, next(streams)),
        "probe": ProbeTwin("probe", plant, now, next(streams)),
    }
    families: tuple[tuple[str, type[Any]], ...] = (
        ("accelerating", SupplyTwin),
        ("esa", EsaTwin),
        ("detector", SupplyTwin),
        ("source", SourceTwin),
        ("counter", CounterTwin),
        ("electrometer", ElectrometerTwin),
        ("source_gauge", GaugeTwin),
        ("analyser_gauge", GaugeTwin),
        ("water", WaterTwin),
        ("interlocks", InterlocksTwin),
        ("permit", PermitTwin),
    )
    for role, family in families:
        twins[role] = family(role, plant, now, next(streams))
    return twins
