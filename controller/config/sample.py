"""The sample file: the simulated ion source, for rehearsals only. All values SI."""

from __future__ import annotations

from typing import Literal, Self

from pydantic import Field, model_validator

from controller.config.units import (
    ElectronVolts,
    FaultAt,
    Fraction,
    Kelvin,
    Number,
    PerSecond,
    Seconds,
    Settings,
    Text,
)
from controller.physics.ions import parse_ion


class SourceSettings(Settings):
    """Behaviour of the source. ``mass_bias`` is the exponent of the exponential law."""

    kind: Literal["thermal", "plasma"]
    temperature: Kelvin = Field(default=2000.0, gt=0)  # thermal
    energy_fwhm: ElectronVolts = Field(default=5.0, gt=0)  # plasma
    mass_bias: Number = Field(default=0.0, ge=-20, le=20)
    mass_bias_spread: Number = Field(default=0.0, ge=0, le=20)
    drift_per_hour: Fraction = Field(default=0.0, ge=-1, le=10)
    flicker: Fraction = Field(default=0.0, ge=0, le=1)  # rms, slow, common to all ions
    flicker_time: Seconds = Field(default=30.0, gt=0)


class ComponentSettings(Settings):
    """One chemical species: an element or a molecule, with the abundances of its isotopic ions."""

    name: Text
    rate: PerSecond = Field(gt=0)  # ions per second arriving at the collector, summed over ions
    ions: dict[str, Number] = Field(min_length=1)  # ion label -> relative abundance (need not sum to 1)

    @model_validator(mode="after")
    def _ions_exist(self) -> Self:
        for label, abundance in self.ions.items():
            try:
                parse_ion(label)
            except ValueError as error:
                raise FaultAt(str(error), "ions", label) from None
            if not abundance > 0:
                raise FaultAt(f"abundance of {label} must be above zero, not {abundance:g}", "ions", label)
        return self


class Sample(Settings):
    name: Text
    source: SourceSettings
    components: tuple[ComponentSettings, ...] = Field(min_length=1)
