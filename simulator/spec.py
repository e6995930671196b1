"""What a simulated plant is made of. Plain data in SI; the composition root fills it in."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True)
class OpticsSpec:
    esa_radius: float
    esa_gap: float
    esa_angle: float
    magnet_radius: float
    magnet_angle: float
    source_slit: float
    energy_slit: float
    collector_slit: float
    half_angle: float
    radius_spread: float = 1e-4
    tail_one_unit: float = 3e-6  # signal one unit below a peak, of the peak
    tail_width_u: float = 0.85
    tail_high_side: float = 0.2  # of the low side


@dataclass(frozen=True, slots=True)
class MagnetSpec:
    amps_max: float
    slew: float
    resolution: float
    inductance: float
    resistance: float
    compliance: float
    initial_tesla_per_amp: float
    saturation: float
    hysteresis: str = "preisach"  # or "jiles-atherton"
    loop_tesla: float = 4e-3
    loop_amps: float = 2.0
    eddy_amplitudes: tuple[float, ...] = (0.02, 0.006, 0.0015)
    eddy_seconds: tuple[float, ...] = (0.06, 0.3, 1.5)
    noise: float = 1e-6
    drift_per_hour: float = 5e-6
    law_spread: float = 2e-3
    probe_noise: float = 1e-6
    probe_scale_spread: float = 2e-5
    shape_spread: float = 0.1  # of loop and eddy parameters about the values above


@dataclass(frozen=True, slots=True)
class SupplySpec:
    """A high-voltage supply."""

    volts_max: float
    slew: float
    bleed: float
    divider_spread: float = 2e-4
    ripple: float = 2e-6
    read_noise: float = 5e-6  # of volts_max


@dataclass(frozen=True, slots=True)
class DetectorSpec:
    dead_time: float
    dead_time_u: float
    paralyzable: bool
    dark_rate: float
    rate_max: float
    detector_volts: float
    resistance: float
    time_constant: float
    kelvin: float
    gain: float
    gain_u: float
    electrometer_volts_max: float


@dataclass(frozen=True, slots=True)
class ServicesSpec:
    """Vacuum and water at rest."""

    source_pascals: float = 8e-4
    analyser_pascals: float = 4e-6
    flow: float = 1e-4  # m3/s
    pump_seconds: float = 0.4
    hardwired_chain: bool = True


@dataclass(frozen=True, slots=True)
class SourceSpec:
    kind: str  # "thermal" | "plasma"
    temperature: float = 2000.0
    energy_fwhm: float = 5.0  # eV, plasma
    mass_bias: float = 0.0
    mass_bias_spread: float = 0.0
    drift_per_hour: float = 0.0
    flicker: float = 0.0
    flicker_seconds: float = 30.0
    extraction_exponent: float = 0.0


@dataclass(frozen=True, slots=True)
class SpeciesSpec:
    """One ion: its rate at the top of its peak before mass bias, in 1/s."""

    label: str
    rate: float


@dataclass(frozen=True, slots=True)
class PlantSpec:
    optics: OpticsSpec
    magnet: MagnetSpec
    accelerating: SupplySpec
    esa: SupplySpec
    detector: SupplySpec
    detectors: DetectorSpec
    identities: Mapping[str, tuple[str, str]]  # role -> (model, serial)
    nominal_volts: float
    services: ServicesSpec = ServicesSpec()
    late_reply: float = 0.0
    garbled_reply: float = 0.0


@dataclass(frozen=True, slots=True)
class ScheduledFault:
    """What goes wrong, when (s), where, for how long (s, None: for ever) and how much."""

    kind: str
    at: float
    role: str | None = None
    lasts: float | None = None
    size: float | None = None


@dataclass(slots=True)
class TruthEvent:
    """One line of the truth log."""

    at: float
    what: str
    value: float = field(default=0.0)
