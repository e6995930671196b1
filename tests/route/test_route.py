"""The route against brute force and scipy; every refusal names key and limit."""

from __future__ import annotations

import itertools
import math
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from controller.config.instrument import Instrument
from controller.config.load import load_instrument, load_sequence
from controller.config.sequence import Sequence
from controller.errors import ConfigRefused
from controller.physics.fields import tracking_ratio
from controller.physics.ions import parse_ion
from controller.route.dwell import counting_u, optimal_share
from controller.route.forecast import describe, forecast
from controller.route.plan import plan_route

CONFIGS = Path(__file__).parents[2] / "configs"
POOL = [
    f"{nuclide}+"
    for nuclide in (
        *("39K", "56Fe", "63Cu", "65Cu", "85Rb", "87Sr", "88Sr", "90Zr"),
        *("96Zr", "129Xe", "132Xe", "136Xe", "204Pb", "208Pb", "232Th", "238U"),
    )
]


def bench() -> Instrument:
    return load_instrument(str(CONFIGS / "bench" / "instrument.toml")).settings


def sequence(*labels: str, **more: object) -> Sequence:
    ions = [{"ion": label, "dwell": "1 s", "expected_rate": 1e4} for label in labels]
    base: dict[str, object] = {
        "title": "t",
        "instrument": "i",
        "run": {"blocks": 1, "cycles_per_block": 1, "centre_every": 1},
        "ions": ions,
        "ratios": [{"numerator": labels[0], "denominator": labels[-1]}],
    }
    return Sequence.model_validate({**base, **more})


def fewest(labels: list[str], span: float) -> int:
    """The least number of groups of any partition into groups inside the span, by trying all cuts."""
    masses = sorted(parse_ion(label).mass_to_charge for label in labels)
    for cuts in range(len(masses)):
        for places in itertools.combinations(range(1, len(masses)), cuts):
            edges = [0, *places, len(masses)]
            if all(masses[b - 1] <= masses[a] * span for a, b in itertools.pairwise(edges)):
                return cuts + 1
    raise AssertionError


@pytest.mark.parametrize("seed", range(12))
def test_the_route_uses_the_fewest_stations(seed: int) -> None:
    rng = np.random.default_rng(seed)
    labels = rng.choice(POOL, size=int(rng.integers(2, 9)), replace=False).tolist()
    route = plan_route(sequence(*labels), bench())
    assert len(route.stations) == fewest(labels, 1.15)
    assert sorted(stop.label for stop in route.stops) == sorted(labels)
    fields = [station.field_tesla for station in route.stations]
    assert fields == sorted(fields)


def test_stops_keep_mass_times_voltage_and_the_esa_follows() -> None:
    instrument = bench()
    route = plan_route(
        load_sequence(str(CONFIGS / "lead-thorium-uranium" / "sequence.toml")).settings, instrument
    )
    offset = instrument.accelerating.source_offset
    for station in route.stations:
        products = {round(s.mass_to_charge * (s.accel_volts + offset), 6) for s in station.stops}
        assert max(products) - min(products) < 1e-5 * max(products)
        for stop in station.stops:
            assert stop.esa_volts == pytest.approx(
                tracking_ratio(instrument.geometry) * (stop.accel_volts + offset)
            )
            assert stop.accel_volts <= instrument.accelerating.volts_max
    assert [len(station.stops) for station in route.stations] == [9, 3, 2]


def test_a_dwell_is_cut_into_equal_gates() -> None:
    made = sequence(
        "87Sr+", "88Sr+", run={"blocks": 1, "cycles_per_block": 1, "centre_every": 1, "gate": "300 ms"}
    )
    assert [stop.gates for stop in plan_route(made, bench()).stops] == [4, 4]


def test_named_stations_are_respected() -> None:
    made = sequence("87Sr+", "88Sr+", "208Pb+")
    ions = [
        {"ion": "87Sr+", "dwell": "1 s", "station": "low"},
        {"ion": "88Sr+", "dwell": "1 s", "station": "high"},
    ]
    stations = [{"name": "high", "reference": "88Sr+"}, {"name": "low", "reference": "87Sr+"}]
    made = sequence("87Sr+", "88Sr+", ions=ions, stations=stations)
    route = plan_route(made, bench())
    assert [station.name for station in route.stations] == ["low", "high"]
    assert all(stop.accel_volts == pytest.approx(8000.0) for stop in route.stops)


REFUSALS = [
    (sequence("7Li+", "88Sr+"), {"field_min": 0.2}, "not reachable with this magnet", "ions[0].ion"),
    (sequence("238U+", "88Sr+"), {"field_max": 0.5}, "not reachable with this magnet", "ions[0].ion"),
    (
        sequence("87Sr+", "88Sr+", backgrounds=[{"name": "far", "mass_to_charge": "120 u", "dwell": "1 s"}]),
        {},
        "outside the voltage span",
        "backgrounds[0].mass_to_charge",
    ),
    (
        sequence(
            "87Sr+",
            "208Pb+",
            ions=[
                {"ion": "87Sr+", "dwell": "1 s", "station": "a"},
                {"ion": "208Pb+", "dwell": "1 s", "station": "a"},
            ],
            stations=[{"name": "a", "reference": "87Sr+"}],
        ),
        {},
        "outside the voltage span",
        "ions[1].ion",
    ),
    (
        sequence(
            "87Sr+",
            "88Sr+",
            ions=[{"ion": "87Sr+", "dwell": "1 s", "station": "b"}, {"ion": "88Sr+", "dwell": "1 s"}],
        ),
        {},
        "no such station",
        "ions[0].station",
    ),
    (
        sequence("87Sr+", "88Sr+", stations=[{"name": "a", "reference": "87Sr+"}]),
        {},
        "is not an ion of this station",
        "stations[0].reference",
    ),
]


@pytest.mark.parametrize(("made", "magnet", "says", "key"), REFUSALS)
def test_a_refusal_names_key_value_limit_and_next_action(
    made: Sequence, magnet: dict[str, float], says: str, key: str
) -> None:
    instrument = bench()
    instrument = instrument.model_copy(update={"magnet": instrument.magnet.model_copy(update=magnet)})
    with pytest.raises(ConfigRefused) as caught:
        plan_route(made, instrument, "my.toml")
    assert says in str(caught.value)
    assert caught.value.key == key
    assert caught.value.limit
    assert caught.value.next_action


def test_the_optimal_share_is_the_minimum_that_scipy_finds() -> None:
    """Two beams of 1e5 and 1e4 per second in 10 s: against scipy.optimize."""
    share = optimal_share((1.0, -1.0), (1e5, 1e4), (0.0, 0.0), 10.0)
    found = minimize_scalar(
        lambda t: 1 / (1e5 * t) + 1 / (1e4 * (10 - t)),
        bounds=(0.01, 9.99),
        method="bounded",
        options={"xatol": 1e-9},
    )
    assert share.seconds[0] == pytest.approx(float(found.x), rel=1e-5)
    assert share.u_relative == pytest.approx(math.sqrt(float(found.fun)), rel=1e-9)
    assert share.seconds == pytest.approx((2.402531, 7.597469), rel=1e-6)
    assert share.u_relative == pytest.approx(4162.278e-6, rel=1e-6)
    with pytest.raises(ValueError, match="above zero"):
        optimal_share((1.0, -1.0), (1e5, 0.0), (0.0, 0.0), 10.0)


def test_the_counting_floor_of_a_hundred_cycles() -> None:
    """1e5 and 1e4 per second for 1 s and 3 s, 100 cycles: 658.28 ppm by hand."""
    assert counting_u((1, -1), (1e5, 1e4), (1.0, 3.0), 100) == pytest.approx(658.28e-6, rel=1e-5)


def test_a_forecast_adds_up() -> None:
    settings = load_sequence(str(CONFIGS / "strontium" / "sequence.toml")).settings
    instrument = bench()
    route = plan_route(settings, instrument)
    expected = forecast(route, settings, instrument)
    assert expected.dwell_seconds == sum(stop.dwell_seconds for stop in route.stops) == 13.0
    cycles = settings.run.blocks * settings.run.cycles_per_block
    assert expected.expected_counts["88Sr+"] == pytest.approx(5.6e5 * cycles)
    rest = expected.total_seconds - cycles * (expected.dwell_seconds + expected.dead_seconds)
    assert rest == pytest.approx(expected.start_seconds + 4 * expected.centring_seconds)
    assert len(describe(route)) == 1 + len(route.stops)
    assert all(ratio.best_u_relative <= ratio.u_relative * (1 + 1e-12) for ratio in expected.ratios)
