"""The sequence file: what to measure and how to reduce it. All values SI (m/z in u)."""

from __future__ import annotations

from typing import Literal, Self

from pydantic import Field, model_validator

from controller.config.units import AtomicMass, Fraction, Seconds, Settings

DetectorName = Literal["counter", "electrometer"]


class RunSettings(Settings):
    blocks: int = Field(ge=1, le=100_000)
    cycles_per_block: int = Field(ge=1, le=100_000)
    centre_every: int = Field(ge=1)  # blocks between peak centrings
    gate: Seconds | None = None  # longest single integration; a dwell is cut into equal gates
    span_max: float = Field(default=1.15, gt=1, le=2)  # largest m/z ratio inside one station


class StationSettings(Settings):
    """Optional: fixes which ions share a field. Without any, the route finds the fewest stations."""

    name: str
    reference: str  # ion label; measured at the nominal accelerating voltage law
    centre_on: str | None = None  # ion used for peak centring; default: the reference


class IonSettings(Settings):
    ion: str  # "208Pb+", "238U16O+", "208Pb++"
    dwell: Seconds = Field(gt=0)
    detector: DetectorName = "counter"
    station: str | None = None
    expected_rate: float | None = Field(default=None, gt=0)  # 1/s, for forecasts and dwell allocation


class BackgroundSettings(Settings):
    name: str
    mass_to_charge: AtomicMass = Field(gt=0)
    dwell: Seconds = Field(gt=0)
    detector: DetectorName = "counter"
    station: str | None = None


class RatioSettings(Settings):
    numerator: str
    denominator: str
    normalised: bool = True  # apply the mass-bias factor, where normalisation is asked for


class InterferenceSettings(Settings):
    """Isobar ``interfering`` lies on ion ``on``; its size follows from ``monitor``."""

    on: str
    interfering: str
    monitor: str
    ratio: float = Field(gt=0)  # interfering / monitor, true (unfractionated) ratio
    u: float = Field(ge=0)


class NormalisationSettings(Settings):
    law: Literal["exponential"] = "exponential"
    numerator: str
    denominator: str
    value: float = Field(gt=0)
    u: float = Field(default=0.0, ge=0)


class ReductionSettings(Settings):
    cycles_per_group: int = Field(default=3, ge=2)  # non-overlapping groups within a block
    drift_degree: int = Field(default=1, ge=0, le=3)
    background: Literal["none", "nearest", "linear", "log-linear"] = "linear"
    tail_u: Fraction = 0.0  # relative uncertainty of the interpolated background


class Sequence(Settings):
    title: str
    instrument: str  # path of the instrument file, relative to this file
    sample: str | None = None  # path of the sample file, for rehearsals
    run: RunSettings
    ions: tuple[IonSettings, ...] = Field(min_length=1)
    stations: tuple[StationSettings, ...] = ()
    backgrounds: tuple[BackgroundSettings, ...] = ()
    ratios: tuple[RatioSettings, ...] = Field(min_length=1)
    interferences: tuple[InterferenceSettings, ...] = ()
    normalisation: NormalisationSettings | None = None
    reduction: ReductionSettings = ReductionSettings()

    @model_validator(mode="after")
    def _names_are_known(self) -> Self:
        labels = [item.ion for item in self.ions]
        stops = labels + [item.name for item in self.backgrounds]
        twice = sorted({label for label in stops if stops.count(label) > 1})
        if twice:
            raise ValueError(f"named twice: {', '.join(twice)}")
        stations = [station.name for station in self.stations]
        if len(set(stations)) < len(stations):
            raise ValueError("two stations have the same name")
        named = [
            (f"ratios[{i}].{end}", getattr(item, end))
            for i, item in enumerate(self.ratios)
            for end in ("numerator", "denominator")
        ]
        named += [
            (f"interferences[{i}].{end}", getattr(item, end))
            for i, item in enumerate(self.interferences)
            for end in ("on", "monitor")
        ]
        if self.normalisation is not None:
            named += [
                ("normalisation.numerator", self.normalisation.numerator),
                ("normalisation.denominator", self.normalisation.denominator),
            ]
        for key, label in named:
            if label not in labels:
                raise ValueError(f"{key} = {label!r} is not an ion of this sequence ({', '.join(labels)})")
        for i, item in enumerate(self.ratios):
            if item.numerator == item.denominator:
                raise ValueError(f"ratios[{i}] divides {item.numerator} by itself")
        return self
