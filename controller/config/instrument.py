"""The instrument file: the hardware, its limits and what is known of it. All values SI."""

from __future__ import annotations

import math
from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from controller.config.units import (
    Amps,
    AmpsPerSecond,
    Count,
    CubicMetresPerSecond,
    FaultAt,
    Fraction,
    Henries,
    Kelvin,
    Metres,
    Number,
    Ohms,
    Pascals,
    PerSecond,
    Radians,
    Seconds,
    Settings,
    Tesla,
    Text,
    Volts,
    VoltsPerSecond,
)
from controller.physics.fields import tracking_ratio
from controller.physics.magnet_model import MagnetModel


class Geometry(Settings):
    """The ion optics, as drawn. Angles in rad, lengths in m."""

    esa_radius: Metres = Field(gt=0, le=5)
    esa_gap: Metres = Field(gt=0, le=0.2)
    esa_angle: Radians = Field(gt=0, le=3.1416)
    magnet_radius: Metres = Field(gt=0, le=5)
    magnet_angle: Radians = Field(gt=0, le=3.1416)
    source_slit: Metres = Field(gt=0, le=0.01)
    energy_slit: Metres = Field(gt=0, le=0.05)
    collector_slit: Metres = Field(gt=0, le=0.01)
    source_half_angle: Radians = Field(gt=0, le=0.1)

    @model_validator(mode="after")
    def _can_be_built(self) -> Self:
        if self.esa_gap >= self.esa_radius:
            raise FaultAt(
                f"esa_gap {self.esa_gap:g} m must be below esa_radius {self.esa_radius:g} m", "esa_gap"
            )
        if self.magnet_radius >= 2 * self.esa_radius:
            raise FaultAt(
                f"no double focus: magnet_radius {self.magnet_radius:g} m must be below twice "
                f"esa_radius {self.esa_radius:g} m",
                "magnet_radius",
            )
        return self


class MagnetSettings(Settings):
    """Supply limits, and the empirical field law field = saturation * tanh(initial * amps / saturation)."""

    amps_max: Amps = Field(gt=0, le=500)
    amps_per_second_max: AmpsPerSecond = Field(gt=0, le=500)
    safe_amps: Amps = Field(gt=0)  # below this the supply may be disabled
    step_amps_max: Amps = Field(gt=0)  # largest single set-point step the guard permits
    set_point_resolution: Amps = Field(gt=0)
    inductance: Henries = Field(gt=0)
    resistance: Ohms = Field(gt=0)
    compliance: Volts = Field(gt=0)
    initial_tesla_per_amp: Number = Field(gt=0, le=10)
    saturation: Tesla = Field(gt=0, le=20)
    field_min: Tesla = Field(gt=0)
    field_max: Tesla = Field(gt=0, le=20)
    field_window: Fraction = Field(gt=0, le=1e-2)  # +- window of arrival, fraction of field
    field_hold: Seconds = Field(gt=0, le=60)
    field_timeout: Seconds = Field(gt=0, le=600)
    conditioning_cycles: Count = Field(ge=0, le=10)
    conditioning_dwell: Seconds = Field(ge=0, le=120)
    deviation: Amps = Field(gt=0)
    coil_kelvin_trip: Kelvin = Field(gt=273, le=500)

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.safe_amps >= self.amps_max:
            raise FaultAt(
                f"safe_amps {self.safe_amps:g} A must be below amps_max {self.amps_max:g} A", "safe_amps"
            )
        if self.field_min >= self.field_max:
            raise FaultAt(
                f"field_min {self.field_min:g} T must be below field_max {self.field_max:g} T", "field_min"
            )
        if self.field_max >= self.saturation:
            raise FaultAt(
                f"field_max {self.field_max:g} T must be below saturation {self.saturation:g} T", "field_max"
            )
        reached = MagnetModel(self).tesla_for_amps(self.amps_max)
        if self.field_max > reached:
            raise FaultAt(
                f"field_max {self.field_max:g} T is above the {reached:.4g} T that amps_max gives",
                "field_max",
            )
        needed = self.amps_max * self.resistance
        if needed >= self.compliance:
            raise FaultAt(
                f"compliance {self.compliance:g} V cannot hold amps_max: that takes {needed:g} V",
                "compliance",
            )
        return self


class HighVoltageSettings(Settings):
    """One high-voltage output's envelope."""

    volts_max: Volts = Field(gt=0, le=60_000)
    volts_per_second_max: VoltsPerSecond = Field(gt=0, le=1e6)  # upward; downward is free
    step_volts_max: Volts = Field(gt=0)
    settle: Seconds = Field(ge=0, le=60)  # wait after a jump until within tolerance
    deviation: Volts = Field(gt=0)
    deviation_fraction: Fraction = Field(gt=0, le=0.1)
    deviation_after: Seconds = Field(gt=0, le=10)
    safe_volts: Volts = Field(gt=0, le=100)
    bleed_seconds: Seconds = Field(gt=0, le=600)  # expected decay constant when off
    current_max: Amps = Field(gt=0, le=1)

    @model_validator(mode="after")
    def _safe_below_maximum(self) -> Self:
        if self.safe_volts >= self.volts_max:
            raise FaultAt(
                f"safe_volts {self.safe_volts:g} V must be below volts_max {self.volts_max:g} V", "safe_volts"
            )
        return self


class AcceleratingSettings(HighVoltageSettings):
    nominal: Volts = Field(gt=0)  # potential at which the lightest ion of a station is measured
    source_offset: Volts = Field(default=0.0, ge=-100, le=100)  # mean starting energy of the ions, per charge
    jump_span: Fraction = Field(gt=0, le=0.5)  # lowest potential = nominal * (1 - jump_span)

    @model_validator(mode="after")
    def _nominal_inside(self) -> Self:
        if self.nominal > self.volts_max:
            raise FaultAt(f"nominal {self.nominal:g} V is above volts_max {self.volts_max:g} V", "nominal")
        if self.source_offset <= -self.nominal * (1 - self.jump_span):
            raise FaultAt(
                f"source_offset {self.source_offset:g} V leaves the ions no energy", "source_offset"
            )
        return self


class EsaSettings(HighVoltageSettings):
    tracking_trim: Fraction = Field(default=0.0, ge=-0.05, le=0.05)  # U = k V (1 + trim)


class Uncertain(Settings):
    """A number with its standard uncertainty."""

    value: Number
    u: Number = Field(ge=0)


class UncertainSeconds(Settings):
    value: Seconds = Field(ge=0)
    u: Seconds = Field(ge=0)


class CounterSettings(Settings):
    dead_time: UncertainSeconds
    dead_time_kind: Literal["non-paralyzable", "paralyzable"]
    rate_max: PerSecond = Field(gt=0)
    dark_rate: PerSecond = Field(ge=0)
    settle: Seconds = Field(ge=0, le=60)
    detector_volts: Volts = Field(gt=0)

    @model_validator(mode="after")
    def _rate_can_be_corrected(self) -> Self:
        dead = self.rate_max * self.dead_time.value
        # observed rates end at 1/tau; the paralyzable law turns back at a true rate of 1/tau, 1/(e tau) seen
        limit = math.exp(-1) if self.dead_time_kind == "paralyzable" else 1.0
        if dead >= limit:
            raise FaultAt(
                f"rate_max {self.rate_max:g} 1/s times the dead time is {dead:.3g}; a {self.dead_time_kind} "
                f"counter can be corrected below {limit:.3g}",
                "rate_max",
            )
        return self


class ElectrometerSettings(Settings):
    resistance: Ohms = Field(gt=0)
    time_constant: Seconds = Field(ge=0, le=60)
    kelvin: Kelvin = Field(gt=0)
    gain: Uncertain  # yield of the electrometer relative to the counter
    volts_max: Volts = Field(gt=0)


class VacuumLimits(Settings):
    """Permissive below ``permit``; trip above ``trip``."""

    permit: Pascals = Field(gt=0)
    trip: Pascals = Field(gt=0)

    @model_validator(mode="after")
    def _permit_is_stricter(self) -> Self:
        if self.permit >= self.trip:
            raise FaultAt(f"permit {self.permit:g} Pa must be below trip {self.trip:g} Pa", "permit")
        return self


class WaterLimits(Settings):
    permit: CubicMetresPerSecond = Field(gt=0)
    trip: CubicMetresPerSecond = Field(gt=0)
    debounce: Seconds = Field(ge=0, le=2)

    @model_validator(mode="after")
    def _permit_is_stricter(self) -> Self:
        if self.permit <= self.trip:
            raise FaultAt(f"permit {self.permit:g} m3/s must be above trip {self.trip:g} m3/s", "permit")
        return self


class InterlockSettings(Settings):
    """Delays that the site's own analysis must justify (safety.md: a starting proposal)."""

    tick: Seconds = Field(ge=0.01, le=0.25)
    overrun_trip: Seconds = Field(gt=0, le=1)
    source_vacuum: VacuumLimits
    analyser_vacuum: VacuumLimits
    detector_vacuum_hold: Seconds = Field(ge=0)
    water: WaterLimits
    cover_hold: Seconds = Field(ge=0)
    channel_disagreement: Seconds = Field(gt=0, le=1)
    settle_before_parked: Seconds = Field(ge=0)  # rebound watch


class DeviceSettings(Settings):
    """One device: which driver speaks to it, where it is, who it must be, how often it is heard."""

    driver: Text
    address: Text  # "sim:<role>" in process
    model: Text
    serial: Text
    poll: Seconds = Field(gt=0, le=60)
    stale_after: Seconds = Field(gt=0, le=300)

    @model_validator(mode="after")
    def _heard_before_stale(self) -> Self:
        if self.stale_after < 2 * self.poll:
            raise FaultAt(
                f"stale_after {self.stale_after:g} s must be at least two polls of {self.poll:g} s",
                "stale_after",
            )
        return self


class Devices(Settings):
    magnet: DeviceSettings
    probe: DeviceSettings
    accelerating: DeviceSettings
    esa: DeviceSettings
    detector: DeviceSettings  # detector high voltage
    source: DeviceSettings  # source gate: ions may leave the source
    counter: DeviceSettings
    electrometer: DeviceSettings
    source_gauge: DeviceSettings
    analyser_gauge: DeviceSettings
    water: DeviceSettings
    interlocks: DeviceSettings
    permit: DeviceSettings

    @model_validator(mode="after")
    def _serials_differ(self) -> Self:
        seen: dict[str, str] = {}
        for role in type(self).model_fields:
            serial = getattr(self, role).serial
            if serial in seen:
                raise FaultAt(f"{role} and {seen[serial]} have the same serial {serial!r}", role, "serial")
            seen[serial] = role
        return self


class Simulation(Settings):
    """What the simulated plant is made of; ignored on hardware. Spreads are one standard deviation."""

    hysteresis: Literal["preisach", "jiles-atherton"] = "preisach"
    loop_tesla: Tesla = Field(default=4e-3, ge=0, le=1)
    loop_amps: Amps = Field(default=2.0, gt=0)
    eddy_amplitudes: tuple[Number, ...] = (0.02, 0.006, 0.0015)
    eddy_seconds: tuple[Annotated[Number, Field(gt=0)], ...] = (0.06, 0.3, 1.5)
    field_noise: Fraction = Field(default=1e-6, ge=0, le=0.1)
    field_drift_per_hour: Fraction = Field(default=5e-6, ge=-0.1, le=0.1)
    probe_noise: Tesla = Field(default=1e-6, ge=0, le=0.1)
    probe_scale_spread: Fraction = Field(default=2e-5, ge=0, le=0.1)
    divider_spread: Fraction = Field(default=2e-4, ge=0, le=0.1)
    radius_spread: Fraction = Field(default=1e-4, ge=0, le=0.1)
    field_law_spread: Fraction = Field(default=2e-3, ge=0, le=0.1)
    tail_one_unit: Fraction = Field(default=3e-6, ge=0, le=0.1)
    late_reply: Fraction = Field(default=0.0, ge=0, le=1)
    garbled_reply: Fraction = Field(default=0.0, ge=0, le=1)

    @model_validator(mode="after")
    def _each_mode_has_a_time(self) -> Self:
        if len(self.eddy_amplitudes) != len(self.eddy_seconds):
            raise FaultAt("eddy_amplitudes and eddy_seconds must have the same length", "eddy_seconds")
        return self


class Instrument(Settings):
    name: Text
    kind: Literal["simulated", "hardware"]
    geometry: Geometry
    magnet: MagnetSettings
    accelerating: AcceleratingSettings
    esa: EsaSettings
    detector: HighVoltageSettings
    counter: CounterSettings
    electrometer: ElectrometerSettings
    interlocks: InterlockSettings
    devices: Devices
    simulation: Simulation = Simulation()

    @model_validator(mode="after")
    def _addresses_go_with_the_kind(self) -> Self:
        for role in Devices.model_fields:
            device: DeviceSettings = getattr(self.devices, role)
            if device.address.startswith("sim:") is not (self.kind == "simulated"):
                raise FaultAt(
                    f"address {device.address!r} does not go with kind {self.kind!r}: "
                    "only a simulated instrument has sim: addresses",
                    *("devices", role, "address"),
                )
        return self

    @model_validator(mode="after")
    def _supplies_reach_what_is_asked(self) -> Self:
        top = self.accelerating.volts_max + self.accelerating.source_offset
        needed = tracking_ratio(self.geometry) * top * (1.0 + self.esa.tracking_trim)
        if needed > self.esa.volts_max:
            raise FaultAt(
                f"volts_max {self.esa.volts_max:g} V cannot follow accelerating.volts_max: "
                f"the ESA then needs {needed:.1f} V",
                *("esa", "volts_max"),
            )
        if self.counter.detector_volts > self.detector.volts_max:
            raise FaultAt(
                f"detector_volts {self.counter.detector_volts:g} V is above "
                f"detector.volts_max {self.detector.volts_max:g} V",
                *("counter", "detector_volts"),
            )
        return self
