"""The route against brute force and scipy; every refusal names key and limit."""

from __future__ import annotations

import pytest
from route_samples import CONFIGS, bench, sequence

from controller.config.load import load_sequence
from controller.config.sequence import Sequence
from controller.errors import ConfigRefused
from controller.physics.fields import tracking_ratio
from controller.route.plan import plan_route


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
