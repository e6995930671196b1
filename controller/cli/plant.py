"""Builds the simulated plant that a rehearsal runs against, from the files' settings."""

from __future__ import annotations

from collections.abc import Callable

from controller.cli.job import Job
from controller.config.instrument import HighVoltageSettings, Instrument
from controller.config.sample import Sample
from controller.errors import ConfigRefused
from simulator.spec import (
    DetectorSpec,
    MagnetSpec,
    OpticsSpec,
    PlantSpec,
    ScheduledFault,
    SourceSpec,
    SpeciesSpec,
    SupplySpec,
)
from simulator.world import World


def build_world(job: Job, *, seed: int, now: Callable[[], float]) -> World:
    """The plant of a job. Raises ConfigRefused for a fault that names no device, or an unknown ion."""
    assert job.sample is not None
    sample, instrument = job.sample.settings, job.instrument.settings
    faults = () if job.faults is None else job.faults.settings.faults
    try:
        species = _species(sample)
    except KeyError as error:
        raise ConfigRefused(
            f"{error.args[0]} is not in the simulator's table of nuclides",
            file=job.sample.path,
            key="components",
            next_action="correct the ion's label",
        ) from None
    try:
        return World(
            plant_spec(instrument),
            _source(sample),
            species,
            seed=seed,
            now=now,
            faults=[ScheduledFault(f.kind, f.at, f.role, f.lasts, f.size) for f in faults],
        )
    except ValueError as error:
        raise ConfigRefused(
            str(error),
            file=job.faults.path if job.faults else job.instrument.path,
            key="faults",
            next_action="name a role that has such a device",
        ) from None


def plant_spec(instrument: Instrument) -> PlantSpec:
    """The plant's nominal description; what it hides is drawn by its seed."""
    geometry, magnet, simulation = instrument.geometry, instrument.magnet, instrument.simulation
    counter, electrometer = instrument.counter, instrument.electrometer
    return PlantSpec(
        optics=OpticsSpec(
            esa_radius=geometry.esa_radius,
            esa_gap=geometry.esa_gap,
            esa_angle=geometry.esa_angle,
            magnet_radius=geometry.magnet_radius,
            magnet_angle=geometry.magnet_angle,
            source_slit=geometry.source_slit,
            energy_slit=geometry.energy_slit,
            collector_slit=geometry.collector_slit,
            half_angle=geometry.source_half_angle,
            radius_spread=simulation.radius_spread,
            tail_one_unit=simulation.tail_one_unit,
        ),
        magnet=MagnetSpec(
            amps_max=magnet.amps_max,
            slew=magnet.amps_per_second_max,
            resolution=magnet.set_point_resolution,
            inductance=magnet.inductance,
            resistance=magnet.resistance,
            compliance=magnet.compliance,
            initial_tesla_per_amp=magnet.initial_tesla_per_amp,
            saturation=magnet.saturation,
            hysteresis=simulation.hysteresis,
            loop_tesla=simulation.loop_tesla,
            loop_amps=simulation.loop_amps,
            eddy_amplitudes=simulation.eddy_amplitudes,
            eddy_seconds=simulation.eddy_seconds,
            noise=simulation.field_noise,
            drift_per_hour=simulation.field_drift_per_hour,
            law_spread=simulation.field_law_spread,
            probe_noise=simulation.probe_noise,
            probe_scale_spread=simulation.probe_scale_spread,
        ),
        accelerating=_supply(instrument.accelerating, simulation.divider_spread),
        esa=_supply(instrument.esa, simulation.divider_spread),
        detector=_supply(instrument.detector, simulation.divider_spread),
        detectors=DetectorSpec(
            dead_time=counter.dead_time.value,
            dead_time_u=counter.dead_time.u,
            paralyzable=counter.dead_time_kind == "paralyzable",
            dark_rate=counter.dark_rate,
            rate_max=counter.rate_max,
            detector_volts=counter.detector_volts,
            resistance=electrometer.resistance,
            time_constant=electrometer.time_constant,
            kelvin=electrometer.kelvin,
            gain=electrometer.gain.value,
            gain_u=electrometer.gain.u,
            electrometer_volts_max=electrometer.volts_max,
        ),
        identities={
            role: (device.model, device.serial)
            for role, device in (
                (r, getattr(instrument.devices, r)) for r in type(instrument.devices).model_fields
            )
        },
        nominal_volts=instrument.accelerating.nominal,
        late_reply=simulation.late_reply,
        garbled_reply=simulation.garbled_reply,
    )


def _supply(settings: HighVoltageSettings, spread: float) -> SupplySpec:
    return SupplySpec(
        volts_max=settings.volts_max,
        slew=settings.volts_per_second_max,
        bleed=settings.bleed_seconds,
        divider_spread=spread,
    )


def _source(sample: Sample) -> SourceSpec:
    source = sample.source
    return SourceSpec(
        kind=source.kind,
        temperature=source.temperature,
        energy_fwhm=source.energy_fwhm,
        mass_bias=source.mass_bias,
        mass_bias_spread=source.mass_bias_spread,
        drift_per_hour=source.drift_per_hour,
        flicker=source.flicker,
        flicker_seconds=source.flicker_time,
    )


def _species(sample: Sample) -> list[SpeciesSpec]:
    """Rates of all ions; an ion that two components share is added up."""
    rates: dict[str, float] = {}
    for component in sample.components:
        whole = sum(component.ions.values())
        for label, share in component.ions.items():
            rates[label] = rates.get(label, 0.0) + component.rate * share / whole
    return [SpeciesSpec(label, rate) for label, rate in rates.items()]
