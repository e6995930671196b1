"""The route's groups and its order against trying all of them."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest
from route_samples import CONFIGS, POOL, bench, sequence

from controller.config.instrument import Instrument
from controller.config.load import load_sequence, parse_sequence
from controller.config.sequence import Sequence
from controller.errors import ConfigRefused
from controller.physics.ions import parse_ion
from controller.route.forecast import forecast
from controller.route.plan import Route, plan_route


def partitions(items: list[str]) -> Iterator[list[list[str]]]:
    """All ways to part a list into groups, in no order."""
    if not items:
        yield []
        return
    first, rest = items[0], items[1:]
    for others in partitions(rest):
        yield [[first], *others]
        for place in range(len(others)):
            yield [*others[:place], [first, *others[place]], *others[place + 1 :]]


def reachable(group: list[str], instrument: Instrument, span_max: float) -> bool:
    """Whether one field serves a group, from the voltages: (m/z)(V + V0) is the same for all of it."""
    accelerating = instrument.accelerating
    masses = [parse_ion(label).mass_to_charge for label in group]
    lightest, offset = min(masses), accelerating.source_offset
    volts = [(accelerating.nominal + offset) * lightest / mass - offset for mass in masses]
    lowest = accelerating.nominal * (1 - accelerating.jump_span)
    return min(volts) >= lowest and max(masses) / lightest <= span_max


@pytest.mark.parametrize("seed", range(25))
def test_no_partition_of_the_ions_has_fewer_stations(seed: int) -> None:
    rng = np.random.default_rng(seed)
    instrument = bench(
        accelerating={
            "jump_span": float(rng.uniform(0.02, 0.4)),
            "source_offset": float(rng.choice([0.0, 0.34, 60.0])),
        }
    )
    span_max = float(rng.uniform(1.02, 1.6))
    labels = rng.choice(POOL, size=int(rng.integers(2, 8)), replace=False).tolist()
    run = {"blocks": 1, "cycles_per_block": 1, "centre_every": 1, "span_max": span_max}
    route = plan_route(sequence(*labels, run=run), instrument)
    for station in route.stations:
        assert reachable([stop.label for stop in station.stops], instrument, span_max)
    best = min(
        len(groups)
        for groups in partitions(labels)
        if all(reachable(group, instrument, span_max) for group in groups)
    )
    assert len(route.stations) == best


def dead_seconds(route: Route, made: Sequence, instrument: Instrument) -> float:
    return forecast(route, made, instrument).dead_seconds


@pytest.mark.parametrize("seed", range(6))
def test_no_order_of_stations_and_stops_has_less_dead_time(seed: int) -> None:
    """By trying every order of the stations, and of the stops inside each."""
    rng = np.random.default_rng(seed)
    instrument = bench(accelerating={"volts_per_second_max": 1e3})  # so that the order of stops matters
    choice = ["129Xe+", "132Xe+", "136Xe+", "204Pb+", "208Pb+", "238U+"]
    labels = ["90Zr+", "84Sr+", "87Sr+", *rng.choice(choice, size=4, replace=False).tolist()]
    made = sequence(*labels)
    route = plan_route(made, instrument)
    best = dead_seconds(route, made, instrument)
    seen = []
    for order in itertools.permutations(route.stations):
        inside = [list(itertools.permutations(station.stops)) for station in order]
        for stops in itertools.product(*inside):
            other = tuple(replace(s, stops=tuple(p)) for s, p in zip(order, stops, strict=True))
            seen.append(dead_seconds(Route(other), made, instrument))
    assert best == pytest.approx(min(seen), abs=1e-9)
    assert max(seen) > best + 0.05  # a wrong order would show


def test_the_stops_of_a_lone_station_are_a_shortest_round() -> None:
    instrument = bench()
    made = load_sequence(str(CONFIGS / "strontium" / "sequence.toml")).settings
    made = made.model_copy(update={"backgrounds": made.backgrounds[:1]})
    route = plan_route(made, instrument)
    best = dead_seconds(route, made, instrument)
    station = route.stations[0]
    seen = [
        dead_seconds(Route((replace(station, stops=order),)), made, instrument)
        for order in itertools.permutations(station.stops)
    ]
    assert best == pytest.approx(min(seen), abs=1e-9)
    assert max(seen) > best + 0.05


def test_an_ion_at_the_very_end_of_the_span_shares_the_station() -> None:
    """With a source offset the reach is (V + V0)/(V(1 - s) + V0), a little less than 1/(1 - s)."""
    ratio = parse_ion("90Zr+").mass_to_charge / parse_ion("88Sr+").mass_to_charge
    for offset in (0.0, 0.34, 50.0):
        volts = (8000.0 + offset) / ratio - offset
        for change, stations in ((1e-9, 1), (-1e-9, 2)):
            span = 1.0 - volts / 8000.0 + change
            instrument = bench(accelerating={"jump_span": span, "source_offset": offset})
            assert len(plan_route(sequence("88Sr+", "90Zr+"), instrument).stations) == stations
    # between the two limits: joined without the offset, and never refused by the route's own choice
    between = bench(accelerating={"jump_span": 1.0 - 1.0 / ratio + 1e-12, "source_offset": 50.0})
    assert len(plan_route(sequence("88Sr+", "90Zr+"), between).stations) == 2


def background(mass: float, **more: str) -> list[dict[str, object]]:
    return [{"name": "off", "mass_to_charge": f"{mass} u", "dwell": "1 s", **more}]


def stops_of(made: Sequence) -> list[list[str]]:
    return [[stop.label for stop in station.stops] for station in plan_route(made, bench()).stations]


def test_a_background_goes_to_the_nearest_station_that_reaches_it() -> None:
    """100 u is nearer to 105Pd, whose station would need 8.4 kV for it; that of 88Sr goes down to it."""
    assert stops_of(sequence("88Sr+", "105Pd+", backgrounds=background(100.0))) == [
        ["88Sr+", "off"],
        ["105Pd+"],
    ]
    # 103 u both reach: the nearer has it (8.155 kV)
    assert stops_of(sequence("90Zr+", "105Pd+", backgrounds=background(103.0))) == [
        ["90Zr+"],
        ["off", "105Pd+"],
    ]


def test_a_background_that_no_station_reaches_is_refused() -> None:
    made = sequence("88Sr+", "105Pd+", backgrounds=background(60.0))
    with pytest.raises(ConfigRefused, match="outside the voltage span") as caught:
        plan_route(made, bench())
    assert caught.value.key == "backgrounds[0].mass_to_charge"


@pytest.mark.parametrize(
    ("mass", "refused"), [(87.9051, True), (87.92, True), (87.89, True), (87.93, False), (87.5, False)]
)
def test_a_background_on_a_peak_is_refused(mass: float, refused: bool) -> None:
    """The bench's peak is 400 ppm wide at its base (slits 20 and 120 um, dispersion 0.375 m)."""
    made = sequence("88Sr+", "90Zr+", backgrounds=background(mass))
    if not refused:
        assert len(plan_route(made, bench()).stops) == 3
        return
    with pytest.raises(ConfigRefused, match="lies on the peak of 88Sr") as caught:
        plan_route(made, bench())
    assert caught.value.limit == "at least 200 ppm from every ion"


def test_a_named_station_may_not_take_the_name_of_a_chosen_one() -> None:
    ions = [
        {"ion": "88Sr+", "dwell": "1 s", "station": "around 238U+"},
        {"ion": "238U+", "dwell": "1 s"},
    ]
    stations = [{"name": "around 238U+", "reference": "88Sr+"}]
    with pytest.raises(ConfigRefused, match="has this name"):
        plan_route(sequence("88Sr+", "238U+", ions=ions, stations=stations), bench())


def test_a_refusal_of_the_route_names_the_line() -> None:
    path = CONFIGS / "strontium" / "sequence.toml"
    text = path.read_text(encoding="utf-8").replace('"88.5 u"', '"140 u"')
    made = parse_sequence(text, "my.toml")
    with pytest.raises(ConfigRefused) as caught:
        plan_route(made, bench(), "my.toml", text)
    assert (caught.value.file, caught.value.key) == ("my.toml", "backgrounds[2].mass_to_charge")
    assert caught.value.line is not None
    assert text.splitlines()[caught.value.line - 1] == 'mass_to_charge = "140 u"'
