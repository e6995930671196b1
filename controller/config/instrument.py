"""The instrument file: the hardware, its limits and what is known of it. All values SI."""

from __future__ import annotations

from typing import Literal, Self

from pydantic import Field, model_validator

from controller.config.units import (
    Amps,
    AmpsPerSecond,
    CubicMetresPerSecond,
    Fraction,
    Henries,
    Kelvin,
    Metres,
    Ohms,
    Pascals,
    PerSecond,
    Radians,
    Seconds,
    Settings,
    Tesla,
    Volts,
    VoltsPerSecond,
)


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
    initial_tesla_per_amp: float = Field(gt=0, le=10)
    saturation: Tesla = Field(gt=0, le=20)
    field_min: Tesla = Field(gt=0)
    field_max: Tesla = Field(gt=0, le=20)
    field_window: Fraction = Field(gt=0, le=1e-2)  # +- window of arrival, fraction of field
    field_hold: Seconds = Field(gt=0, le=60)
    field_timeout: Seconds = Field(gt=0, le=600)
    conditioning_cycles: int = Field(ge=0, le=10)
    conditioning_dwell: Seconds = Field(ge=0, le=120)
    deviation: Amps = Field(gt=0)
    coil_kelvin_trip: Kelvin = Field(gt=273, le=500)

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.safe_amps >= self.amps_max:
            raise ValueError(f"safe_amps {self.safe_amps:g} A must be below amps_max {self.amps_max:g} A")
        if self.field_min >= self.field_max:
            raise ValueError(f"field_min {self.field_min:g} T must be below field_max {self.field_max:g} T")
        if self.field_max >= self.saturation:
            raise ValueError(f"field_max {self.field_max:g} T must be below saturation {self.saturation:g} T")
        if self.amps_max * self.resistance >= self.compliance:
            needed = self.amps_max * self.resistance
            raise ValueError(
                f"compliance {self.compliance:g} V cannot hold amps_max: that takes {needed:g} V"
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
            raise ValueError(f"safe_volts {self.safe_volts:g} V must be below volts_max {self.volts_max:g} V")
        return self


class AcceleratingSettings(HighVoltageSettings):
    nominal: Volts = Field(gt=0)  # potential at which the lightest ion of a station is measured
    source_offset: Volts = 0.0  # mean starting energy of the ions, per charge
    jump_span: Fraction = Field(gt=0, le=0.5)  # lowest potential = nominal * (1 - jump_span)

    @model_validator(mode="after")
    def _nominal_inside(self) -> Self:
        if self.nominal > self.volts_max:
            raise ValueError(f"nominal {self.nominal:g} V is above volts_max {self.volts_max:g} V")
        return self


class EsaSettings(HighVoltageSettings):
    tracking_trim: Fraction = 0.0  # U = k V (1 + trim)


class Uncertain(Settings):
    """A number with its standard uncertainty."""

    value: float
    u: float = Field(ge=0)


class UncertainSeconds(Settings):
    value: Seconds = Field(ge=0)
    u: Seconds = Field(ge=0)


class CounterSettings(Settings):
    dead_time: UncertainSeconds
    dead_time_kind: Literal["non-paralyzable", "paralyzable"]
    rate_max: PerSecond = Field(gt=0)
    dark_rate: PerSecond = Field(ge=0)
    settle: Seconds = Field(ge=0)
    detector_volts: Volts = Field(gt=0)


class ElectrometerSettings(Settings):
    resistance: Ohms = Field(gt=0)
    time_constant: Seconds = Field(ge=0)
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
            raise ValueError(f"permit {self.permit:g} Pa must be below trip {self.trip:g} Pa")
        return self


class WaterLimits(Settings):
    permit: CubicMetresPerSecond = Field(gt=0)
    trip: CubicMetresPerSecond = Field(gt=0)
    debounce: Seconds = Field(ge=0, le=2)

    @model_validator(mode="after")
    def _permit_is_stricter(self) -> Self:
        if self.permit <= self.trip:
            raise ValueError(f"permit {self.permit:g} m3/s must be above trip {self.trip:g} m3/s")
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

    driver: str
    address: str  # "sim:<role>" in process
    model: str
    serial: str
    poll: Seconds = Field(gt=0, le=60)
    stale_after: Seconds = Field(gt=0, le=300)

    @model_validator(mode="after")
    def _heard_before_stale(self) -> Self:
        if self.stale_after < 2 * self.poll:
            raise ValueError(
                f"stale_after {self.stale_after:g} s must be at least two polls of {self.poll:g} s"
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
                raise ValueError(f"{role} and {seen[serial]} have the same serial {serial!r}")
            seen[serial] = role
        return self


class Simulation(Settings):
    """What the simulated plant is made of; ignored on hardware. Spreads are one standard deviation."""

    hysteresis: Literal["preisach", "jiles-atherton"] = "preisach"
    loop_tesla: Tesla = 4e-3
    loop_amps: Amps = 2.0
    eddy_amplitudes: tuple[float, ...] = (0.02, 0.006, 0.0015)
    eddy_seconds: tuple[float, ...] = (0.06, 0.3, 1.5)
    field_noise: Fraction = 1e-6
    field_drift_per_hour: Fraction = 5e-6
    probe_noise: Tesla = 1e-6
    probe_scale_spread: Fraction = 2e-5
    divider_spread: Fraction = 2e-4
    radius_spread: Fraction = 1e-4
    field_law_spread: Fraction = 2e-3
    tail_one_unit: Fraction = 3e-6
    late_reply: Fraction = 0.0
    garbled_reply: Fraction = 0.0


class Instrument(Settings):
    name: str
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
    def _consistent(self) -> Self:
        for role in Devices.model_fields:
            device: DeviceSettings = getattr(self.devices, role)
            if device.address.startswith("sim:") is not (self.kind == "simulated"):
                raise ValueError(
                    f"devices.{role}.address {device.address!r} does not go with kind {self.kind!r}: "
                    "only a simulated instrument has sim: addresses"
                )
        if self.geometry.magnet_radius >= 2 * self.geometry.esa_radius:
            raise ValueError("no double focus: magnet_radius must be below twice esa_radius")
        if self.simulation.eddy_amplitudes and len(self.simulation.eddy_amplitudes) != len(
            self.simulation.eddy_seconds
        ):
            raise ValueError("simulation.eddy_amplitudes and eddy_seconds must have the same length")
        return self
