"""The ion beam from source to collector: true ions per second at a time, for whatever the fields are."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from simulator.constants import E_CHARGE
from simulator.noise import Wander
from simulator.optics import double_focus, energy_table, gamma_factor, mean_start_energy, peak_table
from simulator.spec import OpticsSpec, SourceSpec, SpeciesSpec
from simulator.species import true_ion

NEGLIGIBLE = 1e-12  # share of a beam below which it is not there


class Source:
    """Rates of the species with mass bias, drift and flicker. All in ions per second."""

    def __init__(self, spec: SourceSpec, species: Sequence[SpeciesSpec], rng: np.random.Generator) -> None:
        self.spec = spec
        self.mass_bias = spec.mass_bias + spec.mass_bias_spread * float(rng.standard_normal())
        self._flicker = Wander(
            rng, spec.flicker, shortest=spec.flicker_seconds, longest=20 * spec.flicker_seconds
        )
        ions = [true_ion(item.label) for item in species]
        reference = ions[0].neutral_u
        # R_true = R_measured (m_i/m_j)^beta, hence the source gives m^-beta of what is there
        self.rates = tuple(
            item.rate * (ion.neutral_u / reference) ** -self.mass_bias
            for item, ion in zip(species, ions, strict=True)
        )

    def level(self, t: float) -> float:
        """Common factor of all beams at a time."""
        return math.exp(self.spec.drift_per_hour * t / 3600.0) * (1.0 + self._flicker(t))


class Beam:
    """Collector current in ions per second from B, ESA volts and accelerating volts (truths)."""

    def __init__(
        self,
        optics: OpticsSpec,
        source: SourceSpec,
        species: Sequence[SpeciesSpec],
        *,
        nominal_volts: float,
        rng: np.random.Generator,
    ) -> None:
        self.esa_radius = optics.esa_radius * (1.0 + optics.radius_spread * float(rng.standard_normal()))
        self.magnet_radius = optics.magnet_radius * (
            1.0 + optics.radius_spread * float(rng.standard_normal())
        )
        self.log_plates = 2.0 * math.asinh(optics.esa_gap / (2.0 * self.esa_radius))
        self.layout = double_focus(optics)
        self._peak = peak_table(optics, self.layout)
        self._energy = energy_table(optics, self.layout, source, nominal_volts)
        self._start = mean_start_energy(source)
        self._nominal, self._extraction = nominal_volts, source.extraction_exponent
        self._tail = (optics.tail_one_unit, optics.tail_width_u, optics.tail_high_side)
        self.source = Source(source, species, rng)
        energy = E_CHARGE * nominal_volts
        # effective kg per coulomb on the axis of a train whose ESA voltage is set by k V: gamma m / q
        self._ions = tuple(
            (ion.kg_per_coulomb * gamma_factor(ion.kg, ion.charge * energy), rate, ion.neutral_u / ion.charge)
            for ion, rate in zip((true_ion(s.label) for s in species), self.source.rates, strict=True)
        )

    def axis(self, tesla: float, esa_volts: float) -> float:
        """gamma m / q in kg/C of the ion on the axis: B^2 r_m^2 / (E r_e)."""
        return (tesla * self.magnet_radius) ** 2 * self.log_plates / esa_volts

    def rate(self, t: float, tesla: float, esa_volts: float, accel_volts: float) -> float:
        """True ions per second on the collector with the source open."""
        if esa_volts <= 1.0 or accel_volts <= 1.0:
            return 0.0
        pass_volts = esa_volts / (2.0 * self.log_plates)
        # energy offset at the nominal energy's scale: the slit sees relative energy
        offset = (accel_volts + self._start - pass_volts) / pass_volts * self._nominal
        passed = self._energy.at(offset)
        if passed < NEGLIGIBLE:
            return 0.0
        axis = self.axis(tesla, esa_volts)
        at = self._peak.at
        amplitude, width, high_side = self._tail
        total = 0.0
        for effective, rate, mass in self._ions:
            relative = effective / axis - 1.0
            distance = relative * mass  # u: the ion is this much heavier than the axis
            if -4e-3 < relative < 4e-3:
                total += rate * at(relative)
            # scattered ions have lost energy and appear below their mass: the axis is below the ion
            spread = distance if distance > 0 else -distance
            if spread < 12.0:
                tail = amplitude * math.exp((1.0 - spread) / width)
                total += rate * (tail if distance > 0 else high_side * tail) * (1.0 if spread > 0.1 else 0.0)
        level = self.source.level(t)
        if self._extraction:
            level *= (accel_volts / self._nominal) ** self._extraction
        return total * passed * level
