"""A small invented instrument for the simulator's tests, and a bench with a hand on its clock."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from simulator.spec import (
    DetectorSpec,
    MagnetSpec,
    OpticsSpec,
    PlantSpec,
    ScheduledFault,
    ServicesSpec,
    SourceSpec,
    SpeciesSpec,
    SupplySpec,
)
from simulator.world import World

ROLES = (
    "magnet", "probe", "accelerating", "esa", "detector", "source", "counter", "electrometer",
    "source_gauge", "analyser_gauge", "water", "interlocks", "permit",
)  # fmt: skip
OUTPUTS = ("magnet", "accelerating", "esa", "detector")
NOMINAL = 8000.0

OPTICS = OpticsSpec(
    esa_radius=0.25, esa_gap=0.015, esa_angle=math.pi / 2, magnet_radius=0.30, magnet_angle=math.pi / 2,
    source_slit=20e-6, energy_slit=1e-3, collector_slit=120e-6, half_angle=1e-6,
    radius_spread=0.0, tail_one_unit=0.0,
)  # fmt: skip
MAGNET = MagnetSpec(
    amps_max=10.0, slew=5.0, resolution=1e-9, inductance=2.0, resistance=2.0, compliance=40.0,
    initial_tesla_per_amp=0.0915666, saturation=4.0, noise=0.0, drift_per_hour=0.0,
    law_spread=0.0, shape_spread=0.0, probe_noise=0.0, probe_scale_spread=0.0,
)  # fmt: skip
DETECTORS = DetectorSpec(
    dead_time=20e-9, dead_time_u=0.0, paralyzable=False, dark_rate=0.0, rate_max=5e6,
    detector_volts=2200.0, resistance=1e11, time_constant=0.1, kelvin=300.0, gain=1.0, gain_u=0.0,
    electrometer_volts_max=50.0,
)  # fmt: skip


def supply(volts_max: float) -> SupplySpec:
    return SupplySpec(volts_max=volts_max, slew=1e4, bleed=0.5, divider_spread=0.0, ripple=0.0)


def plant_spec(**changes: Any) -> PlantSpec:
    """Everything hidden is switched off, unless ``changes`` replaces a part."""
    parts: dict[str, Any] = {
        "optics": OPTICS,
        "magnet": MAGNET,
        "accelerating": supply(8500.0),
        "esa": supply(1100.0),
        "detector": supply(2500.0),
        "detectors": DETECTORS,
        "identities": {role: (f"M-{role}", f"S-{number}") for number, role in enumerate(ROLES)},
        "nominal_volts": NOMINAL,
        "services": ServicesSpec(),
    }
    return PlantSpec(**(parts | changes))


class Bench:
    """A world, and a list that holds the time: whoever changes ``clock[0]`` moves it."""

    def __init__(self, *, seed: int = 1, faults: Sequence[ScheduledFault] = (), **changes: Any) -> None:
        self.clock = [0.0]
        self.world = World(
            plant_spec(**changes),
            SourceSpec("thermal"),
            [SpeciesSpec("88Sr+", 1e6)],
            seed=seed,
            now=lambda: self.clock[0],
            faults=faults,
        )
        self.plant = self.world.plant

    def ask(self, role: str, verb: str, *values: float) -> Any:
        return self.world.twins[role].command(verb, *values)

    def report(self, role: str) -> Any:
        return self.world.twins[role].report()

    def values(self, role: str) -> tuple[float, ...]:
        return tuple(self.report(role)[2])

    def at(self, t: float, *, heard: bool = True) -> None:
        """Let the time come to ``t`` in steps that no watchdog would notice, or, unheard, in one step."""
        while heard and self.clock[0] < t - 0.25:
            self.clock[0] += 0.25
            for role in OUTPUTS:
                self.report(role)
        self.clock[0] = t
        self.report("interlocks")  # anybody's look lets happen what is due

    def live(self, until: float = 10.0) -> None:
        """Everything on, the source open, and settled."""
        for role, verb, *values in (
            ("permit", "enable"), ("accelerating", "enable"), ("accelerating", "set", NOMINAL),
            ("esa", "enable"), ("esa", "set", 960.0), ("detector", "enable"), ("detector", "set", 2200.0),
            ("source", "enable"), ("magnet", "enable"), ("magnet", "set", 4.0),
        ):  # fmt: skip
            assert self.ask(role, verb, *values) == (0,)
        self.at(until)

    def happened(self, what: str) -> list[float]:
        """When the truth log says so."""
        return [event.at for event in self.world.truth.events if event.what == what]
