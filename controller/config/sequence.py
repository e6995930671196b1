"""The sequence file: what to measure and how to reduce it. All values SI (m/z in u)."""

from __future__ import annotations

from typing import Literal, Self

from pydantic import Field, model_validator

from controller.config.labels import IonLabel
from controller.config.units import (
    AtomicMass,
    Count,
    FaultAt,
    Flag,
    Fraction,
    Number,
    Seconds,
    Settings,
    Text,
)
from controller.physics.ions import parse_ion

DWELL_MAX = 3600.0  # s; a dwell longer than the drift it averages over is a mistake of unit
GATE_MIN = 1e-3  # s
ISOBAR = 2e-3  # of m/z: what is further from an ion does not lie on it
DetectorName = Literal["counter", "electrometer"]


class RunSettings(Settings):
    blocks: Count = Field(ge=1, le=100_000)
    cycles_per_block: Count = Field(ge=1, le=100_000)
    centre_every: Count = Field(ge=1, le=100_000)  # blocks between peak centrings
    # longest single integration: a dwell is cut into equal gates
    gate: Seconds | None = Field(default=None, ge=GATE_MIN)
    span_max: Number = Field(default=1.15, gt=1, le=2)  # largest m/z ratio inside one station


class StationSettings(Settings):
    """Optional: fixes which ions share a field. Without any, the route finds the fewest stations."""

    name: Text
    reference: IonLabel  # measured at the nominal accelerating voltage
    centre_on: IonLabel | None = None  # ion used for peak centring; default: the brightest expected


class IonSettings(Settings):
    ion: IonLabel  # "208Pb+", "238U16O+", "208Pb++"
    dwell: Seconds = Field(gt=0, le=DWELL_MAX)
    detector: DetectorName = "counter"
    station: Text | None = None
    expected_rate: Number | None = Field(default=None, gt=0)  # 1/s, for forecasts and dwell allocation


class BackgroundSettings(Settings):
    name: Text
    mass_to_charge: AtomicMass = Field(gt=0, le=1000)
    dwell: Seconds = Field(gt=0, le=DWELL_MAX)
    detector: DetectorName = "counter"
    station: Text | None = None


class Quotient(Settings):
    """Two different ions, one over the other."""

    numerator: Text
    denominator: Text

    @model_validator(mode="after")
    def _two_ions(self) -> Self:
        if self.numerator == self.denominator:
            raise FaultAt(f"divides {self.numerator} by itself", "denominator")
        return self


class RatioSettings(Quotient):
    normalised: Flag = True  # apply the mass-bias factor, where normalisation is asked for


class InterferenceSettings(Settings):
    """Isobar ``interfering`` lies on ion ``on``; its size follows from ``monitor``."""

    on: Text
    interfering: IonLabel
    monitor: Text
    ratio: Number = Field(gt=0)  # interfering / monitor, true (unfractionated) ratio
    u: Number = Field(ge=0)

    @model_validator(mode="after")
    def _monitor_is_another(self) -> Self:
        if self.monitor == self.on:
            raise FaultAt(f"{self.on} cannot monitor what lies on itself", "monitor")
        return self


class NormalisationSettings(Quotient):
    law: Literal["exponential"] = "exponential"
    value: Number = Field(gt=0)
    u: Number = Field(default=0.0, ge=0)


class ReductionSettings(Settings):
    cycles_per_group: Count = Field(default=3, ge=2, le=100_000)  # non-overlapping groups within a block
    drift_degree: Count = Field(default=1, ge=0, le=3)
    background: Literal["none", "nearest", "linear", "log-linear"] = "linear"
    tail_u: Fraction = Field(default=0.0, ge=0, le=10)  # relative uncertainty of the interpolated background


class Sequence(Settings):
    title: Text
    instrument: Text  # path of the instrument file, relative to this file
    sample: Text | None = None  # path of the sample file, for rehearsals
    run: RunSettings
    ions: tuple[IonSettings, ...] = Field(min_length=1)
    stations: tuple[StationSettings, ...] = ()
    backgrounds: tuple[BackgroundSettings, ...] = ()
    ratios: tuple[RatioSettings, ...] = Field(min_length=1)
    interferences: tuple[InterferenceSettings, ...] = ()
    normalisation: NormalisationSettings | None = None
    reduction: ReductionSettings = ReductionSettings()

    @model_validator(mode="after")
    def _names_differ(self) -> Self:
        named: list[tuple[str, tuple[str | int, ...]]] = [
            (item.ion, ("ions", i, "ion")) for i, item in enumerate(self.ions)
        ]
        named += [(item.name, ("backgrounds", i, "name")) for i, item in enumerate(self.backgrounds)]
        _refuse_second(named)
        _refuse_second([(item.name, ("stations", i, "name")) for i, item in enumerate(self.stations)])
        _refuse_second(
            [
                (f"{r.numerator}/{r.denominator}", ("ratios", i, "numerator"))
                for i, r in enumerate(self.ratios)
            ]
        )
        return self

    @model_validator(mode="after")
    def _ions_are_measured(self) -> Self:
        """Whatever a ratio or a correction is made of has a dwell of its own."""
        labels = [item.ion for item in self.ions]
        named: list[tuple[str, tuple[str | int, ...]]] = []
        for i, item in enumerate(self.ratios):
            named.append((item.numerator, ("ratios", i, "numerator")))
            named.append((item.denominator, ("ratios", i, "denominator")))
        for i, isobar in enumerate(self.interferences):
            named.append((isobar.on, ("interferences", i, "on")))
            named.append((isobar.monitor, ("interferences", i, "monitor")))
        if self.normalisation is not None:
            named.append((self.normalisation.numerator, ("normalisation", "numerator")))
            named.append((self.normalisation.denominator, ("normalisation", "denominator")))
        for label, path in named:
            if label not in labels:
                raise FaultAt(f"{label!r} is not an ion of this sequence ({', '.join(labels)})", *path)
        return self

    @model_validator(mode="after")
    def _isobars_lie_on_their_ions(self) -> Self:
        for i, item in enumerate(self.interferences):
            apart = parse_ion(item.interfering).mass_to_charge / parse_ion(item.on).mass_to_charge - 1
            if abs(apart) > ISOBAR:
                raise FaultAt(
                    f"{item.interfering} does not lie on {item.on}: {apart:+.2%} apart in m/z, "
                    f"limit {ISOBAR:.1%}",
                    *("interferences", i, "interfering"),
                )
        return self


def _refuse_second(named: list[tuple[str, tuple[str | int, ...]]]) -> None:
    seen: set[str] = set()
    for name, path in named:
        if name in seen:
            raise FaultAt(f"named twice: {name}", *path)
        seen.add(name)
