"""Assembles a plant with its devices, keeps the truth log, answers what is true."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from simulator.devices import make_twins
from simulator.faults import schedule
from simulator.plant import Plant, TruthLog
from simulator.spec import PlantSpec, ScheduledFault, SourceSpec, SpeciesSpec


class World:
    """One simulated instrument. ``now`` gives the time in s at which commands take effect."""

    def __init__(
        self,
        spec: PlantSpec,
        source: SourceSpec,
        species: Sequence[SpeciesSpec],
        *,
        seed: int,
        now: Callable[[], float],
        faults: Sequence[ScheduledFault] = (),
    ) -> None:
        self.plant = Plant(spec, source, tuple(species), seed=seed)
        self.twins: dict[str, Any] = make_twins(self.plant, now)
        self._rates = {item.label: item.rate for item in species}
        for fault in faults:
            schedule(self.plant, self.twins, fault)

    @property
    def truth(self) -> TruthLog:
        return self.plant.log

    @property
    def hidden(self) -> dict[str, float]:
        """The parameters that the controller is never told."""
        plant = self.plant
        answer = {
            "esa_radius": plant.beam.esa_radius,
            "magnet_radius": plant.beam.magnet_radius,
            "field_law_scale": plant.magnet.law_scale,
            "loop_tesla": plant.magnet.loop_tesla,
            "probe_scale": plant.probe.scale,
            "dead_time": plant.counter.dead_time,
            "electrometer_gain": plant.electrometer.gain,
            "mass_bias": plant.beam.source.mass_bias,
        }
        answer |= {f"{role}_divider": supply.divider for role, supply in plant.supplies.items()}
        for place, (a, tau) in enumerate(
            zip(plant.magnet.eddy_amplitudes, plant.magnet.eddy_seconds, strict=True)
        ):
            answer |= {f"eddy_amplitude_{place}": a, f"eddy_seconds_{place}": tau}
        return answer

    def true_ratio(self, numerator: str, denominator: str) -> float:
        """Ratio of two ions in the sample, before mass bias. Raises KeyError for an ion not in it."""
        return self._rates[numerator] / self._rates[denominator]
