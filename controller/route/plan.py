"""From ions to a route: which stations, which stops, in which order (pure).

A station is one magnet field. Its reference, the lightest ion of the group, is measured at the nominal
accelerating voltage; heavier ones by lowering both voltages. The route uses the fewest stations that the
spans allow: with ions sorted by m/z, filling each station from its lightest ion as far as the span
reaches is optimal (the classical covering of points by intervals of fixed ratio). Stations are visited
in rising field, so that every cycle approaches each field the same way, with one wrap at its end; inside
a station the stops go by falling voltage. No other order has less dead time: a closed walk over points
of a line travels at least twice its length (the magnet, and the voltages of a lone station), an open one
at least once (the voltages of one station among several, whose first jump hides behind the field's move).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import ceil

from controller.config.instrument import Instrument
from controller.config.load import line_at
from controller.config.sequence import BackgroundSettings, IonSettings, Sequence, StationSettings
from controller.errors import ConfigRefused
from controller.physics.fields import esa_volts, field_tesla, jump_volts
from controller.physics.ions import Ion, parse_ion
from controller.physics.magnet_model import MagnetModel, OutsideRange
from controller.physics.peak import peak_widths


@dataclass(frozen=True, slots=True)
class Stop:
    """One ion, or one background position, at a station. SI; m/z in u."""

    label: str
    kind: str  # "ion" | "background"
    mass_to_charge: float
    station: str
    accel_volts: float
    esa_volts: float
    dwell_seconds: float
    gates: int
    detector: str


@dataclass(frozen=True, slots=True)
class Station:
    name: str
    reference: Ion
    field_tesla: float
    amps_estimate: float
    centre_on: str
    stops: tuple[Stop, ...]


@dataclass(frozen=True, slots=True)
class Route:
    stations: tuple[Station, ...]

    @property
    def stops(self) -> tuple[Stop, ...]:
        return tuple(stop for station in self.stations for stop in station.stops)


@dataclass(frozen=True, slots=True)
class _Group:
    name: str
    reference: Ion
    centre_on: str | None
    ions: tuple[tuple[IonSettings, Ion], ...]


def plan_route(
    sequence: Sequence, instrument: Instrument, file: str = "sequence file", text: str = ""
) -> Route:
    """The route of a sequence on an instrument. Raises ConfigRefused for what cannot be reached.

    ``file`` and its ``text`` give a refusal its place.
    """
    return _Planner(sequence, instrument, file, text).route()


class _Planner:
    def __init__(self, sequence: Sequence, instrument: Instrument, file: str, text: str) -> None:
        self.sequence, self.instrument, self.file, self.text = sequence, instrument, file, text
        self.magnet = MagnetModel(instrument.magnet)
        accelerating = instrument.accelerating
        self.volts_min = accelerating.nominal * (1.0 - accelerating.jump_span)
        # the ratio of m/z that the voltage can span below a reference at nominal
        offset = accelerating.source_offset
        self.span = min(sequence.run.span_max, (accelerating.nominal + offset) / (self.volts_min + offset))
        self.peak_base = peak_widths(instrument.geometry).base

    def route(self) -> Route:
        ions = [(item, parse_ion(item.ion)) for item in self.sequence.ions]
        groups = self._named_groups(ions) + self._fewest_groups([p for p in ions if p[0].station is None])
        self._refuse_same_names(groups)
        groups.sort(key=lambda group: group.reference.mass_to_charge)
        stations = [self._station(group) for group in groups]
        for place, background in enumerate(self.sequence.backgrounds):
            self._add_background(stations, background, place)
        return Route(tuple(stations))

    def _refuse(self, problem: str, key: str, value: object, limit: str, next_action: str) -> ConfigRefused:
        line = line_at(self.text, key)
        return ConfigRefused(
            problem, file=self.file, line=line, key=key, value=value, limit=limit, next_action=next_action
        )

    def _refuse_same_names(self, groups: list[_Group]) -> None:
        """What a run learns of a station (current, centre) is kept by its name."""
        names = [group.name for group in groups]
        for place, station in enumerate(self.sequence.stations):
            if names.count(station.name) > 1:
                raise self._refuse(
                    "a station that the route chose has this name",
                    f"stations[{place}].name",
                    station.name,
                    "a name of its own",
                    "choose another name",
                )

    def _fewest_groups(self, ions: list[tuple[IonSettings, Ion]]) -> list[_Group]:
        groups: list[list[tuple[IonSettings, Ion]]] = []
        for pair in sorted(ions, key=lambda pair: pair[1].mass_to_charge):
            if groups and pair[1].mass_to_charge <= groups[-1][0][1].mass_to_charge * self.span:
                groups[-1].append(pair)
            else:
                groups.append([pair])
        return [_Group(f"around {g[0][1].label}", g[0][1], None, tuple(g)) for g in groups]

    def _named_groups(self, ions: list[tuple[IonSettings, Ion]]) -> list[_Group]:
        by_name: dict[str, StationSettings] = {station.name: station for station in self.sequence.stations}
        members: dict[str, list[tuple[IonSettings, Ion]]] = {name: [] for name in by_name}
        for place, (item, ion) in enumerate(ions):
            if item.station is None:
                continue
            if item.station not in by_name:
                raise self._refuse(
                    "no such station",
                    f"ions[{place}].station",
                    item.station,
                    f"one of {', '.join(by_name) or 'none named'}",
                    "add it under [[stations]] or leave the key out",
                )
            members[item.station].append((item, ion))
        groups = []
        for place, (name, settings) in enumerate(by_name.items()):
            labels = [ion.label for _, ion in members[name]]
            for key, label in (("reference", settings.reference), ("centre_on", settings.centre_on)):
                if label is not None and label not in labels:
                    raise self._refuse(
                        "is not an ion of this station",
                        f"stations[{place}].{key}",
                        label,
                        f"one of {', '.join(labels) or 'none'}",
                        f"name one of its ions, or set station = {name!r} at the ion",
                    )
            pairs = tuple(sorted(members[name], key=lambda pair: pair[1].mass_to_charge))
            groups.append(_Group(name, parse_ion(settings.reference), settings.centre_on, pairs))
        return groups

    def _station(self, group: _Group) -> Station:
        accelerating, geometry = self.instrument.accelerating, self.instrument.geometry
        reference = group.reference
        tesla = field_tesla(
            reference.mass_kg,
            reference.charge,
            accelerating.nominal + accelerating.source_offset,
            geometry.magnet_radius,
        )
        try:
            amps = self.magnet.amps_for_tesla(tesla)
        except OutsideRange as error:
            place = next(i for i, item in enumerate(self.sequence.ions) if item.ion == reference.label)
            raise self._refuse(
                f"not reachable with this magnet at {accelerating.nominal:g} V: {error}",
                f"ions[{place}].ion",
                reference.label,
                f"{self.instrument.magnet.field_min:g} to {self.instrument.magnet.field_max:g} T",
                "leave the ion out, or lower `accelerating.nominal` in the instrument file",
            ) from None
        stops = tuple(
            self._stop(
                group.name, reference, item.ion, "ion", ion.mass_to_charge, item.dwell, item.detector,
                f"ions[{self.sequence.ions.index(item)}].ion",
            )
            for item, ion in group.ions
        )  # fmt: skip
        brightest = max(group.ions, key=lambda pair: pair[0].expected_rate or 0.0)[1].label
        return Station(group.name, reference, tesla, amps, group.centre_on or brightest, stops)

    def _reaches(self, reference: Ion, mass_to_charge: float) -> bool:
        accelerating = self.instrument.accelerating
        volts = jump_volts(
            accelerating.nominal, reference.mass_to_charge, mass_to_charge, accelerating.source_offset
        )
        ratio = max(mass_to_charge, reference.mass_to_charge) / min(mass_to_charge, reference.mass_to_charge)
        rounding = 1.0 + 1e-12  # an ion exactly at the end of the span belongs to it
        return self.volts_min <= volts * rounding and (
            volts <= accelerating.volts_max and ratio <= self.span * rounding
        )

    def _stop(
        self,
        station: str,
        reference: Ion,
        label: str,
        kind: str,
        mass_to_charge: float,
        dwell: float,
        detector: str,
        key: str,
    ) -> Stop:
        accelerating = self.instrument.accelerating
        volts = jump_volts(
            accelerating.nominal, reference.mass_to_charge, mass_to_charge, accelerating.source_offset
        )
        low, high = self.volts_min, accelerating.volts_max
        if not self._reaches(reference, mass_to_charge):
            raise self._refuse(
                f"outside the voltage span of station {station!r}: it needs {volts:.1f} V",
                key,
                label,
                f"{low:.1f} to {high:.1f} V and m/z within {self.span:.4g} of {reference.label}",
                "give it a station of its own, or leave its station out",
            )
        gate = self.sequence.run.gate
        return Stop(
            label=label,
            kind=kind,
            mass_to_charge=mass_to_charge,
            station=station,
            accel_volts=volts,
            esa_volts=esa_volts(
                volts,
                self.instrument.geometry,
                source_offset=accelerating.source_offset,
                trim=self.instrument.esa.tracking_trim,
            ),
            dwell_seconds=dwell,
            gates=1 if gate is None else max(1, ceil(dwell / gate - 1e-9)),
            detector=detector,
        )

    def _add_background(self, stations: list[Station], item: BackgroundSettings, place: int) -> None:
        """Put a background position where it is named to be, else at the nearest station that reaches it."""
        named = [s for s in stations if item.station in (None, s.name)]
        if not named:
            raise self._refuse(
                "no such station",
                f"backgrounds[{place}].station",
                item.station,
                f"one of {', '.join(s.name for s in stations)}",
                "correct the name or leave the key out",
            )
        self._refuse_on_a_peak(item, place)

        def distance(station: Station) -> tuple[bool, float]:
            unreached = not self._reaches(station.reference, item.mass_to_charge)
            return unreached, min(abs(s.mass_to_charge - item.mass_to_charge) for s in station.stops)

        station = min(named, key=distance)
        stop = self._stop(
            station.name, station.reference, item.name, "background", item.mass_to_charge, item.dwell,
            item.detector, f"backgrounds[{place}].mass_to_charge",
        )  # fmt: skip
        stops = tuple(sorted((*station.stops, stop), key=lambda s: s.mass_to_charge))
        stations[stations.index(station)] = replace(station, stops=stops)

    def _refuse_on_a_peak(self, item: BackgroundSettings, place: int) -> None:
        labels = [ion.ion for ion in self.sequence.ions]
        labels += [isobar.interfering for isobar in self.sequence.interferences]
        for label in labels:
            apart = item.mass_to_charge / parse_ion(label).mass_to_charge - 1.0
            if abs(apart) < 0.5 * self.peak_base:
                raise self._refuse(
                    f"this background position lies on the peak of {label}",
                    f"backgrounds[{place}].mass_to_charge",
                    item.mass_to_charge,
                    f"at least {1e6 * 0.5 * self.peak_base:.0f} ppm from every ion",
                    "move it away, for instance to a half mass",
                )
