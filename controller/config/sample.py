"""The sample file: the simulated ion source, for rehearsals only. All values SI."""

from __future__ import annotations

from typing import Literal, Self

from pydantic import Field, model_validator

from controller.config.units import ElectronVolts, Fraction, Kelvin, PerSecond, Seconds, Settings


class SourceSettings(Settings):
    """Behaviour of the source. ``mass_bias`` is the exponent of the exponential law."""

    kind: Literal["thermal", "plasma"]
    temperature: Kelvin = Field(default=2000.0, gt=0)  # thermal
    energy_fwhm: ElectronVolts = Field(default=5.0, gt=0)  # plasma
    mass_bias: float = 0.0
    mass_bias_spread: float = Field(default=0.0, ge=0)
    drift_per_hour: Fraction = 0.0
    flicker: Fraction = Field(default=0.0, ge=0)  # rms, slow, common to all ions
    flicker_time: Seconds = Field(default=30.0, gt=0)


class ComponentSettings(Settings):
    """One chemical species: an element or a molecule, with the abundances of its isotopic ions."""

    name: str
    rate: PerSecond = Field(gt=0)  # ions per second arriving at the collector, summed over ions
    ions: dict[str, float] = Field(min_length=1)  # ion label -> relative abundance (need not sum to 1)

    @model_validator(mode="after")
    def _abundances_are_positive(self) -> Self:
        for label, abundance in self.ions.items():
            if not abundance > 0:
                raise ValueError(f"abundance of {label} must be above zero, not {abundance:g}")
        return self


class Sample(Settings):
    name: str
    source: SourceSettings
    components: tuple[ComponentSettings, ...] = Field(min_length=1)
