"""What a fault does to the truth, before, during and after it; gates that something interrupts.

The plant is specified here and asked through its twins: no controller has a part in it.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from simulator.faults import schedule
from simulator.spec import (
    DetectorSpec,
    MagnetSpec,
    OpticsSpec,
    PlantSpec,
    ScheduledFault,
    SourceSpec,
    SpeciesSpec,
    SupplySpec,
)
from simulator.world import World

ROLES = (
    "magnet", "probe", "accelerating", "esa", "detector", "source", "counter", "electrometer",
    "source_gauge", "analyser_gauge", "water", "interlocks", "permit",
)  # fmt: skip
SPEC = PlantSpec(
    optics=OpticsSpec(0.25, 0.015, math.pi / 2, 0.30, math.pi / 2, 20e-6, 1e-3, 120e-6, 5e-3),
    magnet=MagnetSpec(
        amps_max=10.5, slew=5.0, resolution=1e-6, inductance=2.0, resistance=2.0, compliance=40.0,
        initial_tesla_per_amp=0.0915666, saturation=4.0,
    ),
    accelerating=SupplySpec(8200.0, 1e4, 0.5),
    esa=SupplySpec(1100.0, 2e3, 0.2),
    detector=SupplySpec(3000.0, 1e4, 0.3),
    detectors=DetectorSpec(20e-9, 0.0, False, 0.1, 5e6, 2200.0, 1e11, 0.1, 300.0, 1.0, 0.0, 50.0),
    identities=dict.fromkeys(ROLES, ("model", "serial")),
    nominal_volts=8000.0,
)  # fmt: skip


class Bench:
    """A live plant with hands of its own on the clock."""

    def __init__(self, spec: PlantSpec = SPEC) -> None:
        self.now = 0.0
        self.world = World(
            spec, SourceSpec("thermal"), [SpeciesSpec("88Sr+", 6e5)], seed=1, now=lambda: self.now
        )
        self.plant = self.world.plant
        for role, verb, *values in (
            ("permit", "enable"), ("accelerating", "enable"), ("accelerating", "set", 8000.0),
            ("esa", "enable"), ("esa", "set", 959.856), ("detector", "enable"), ("detector", "set", 2200.0),
            ("source", "enable"), ("magnet", "enable"), ("magnet", "set", 4.0),
        ):  # fmt: skip
            assert self.ask(role, verb, *values) == (0,)
        self.go(5.0)

    def ask(self, role: str, verb: str, *values: float) -> tuple[float, ...] | None:
        answer = self.world.twins[role].command(verb, *values)
        return answer if answer is None else tuple(answer)

    def go(self, to: float) -> None:
        self.now = to
        self.world.twins["interlocks"].report()  # anybody's look lets time pass

    def fault(self, kind: str, **where: object) -> None:
        schedule(self.plant, self.world.twins, ScheduledFault(kind, **where))  # type: ignore[arg-type]

    def find_peak(self) -> None:
        """Bring the ion onto the axis by bisection of the true field; a plant is asked, nothing is solved."""
        beam, supplies = self.plant.beam, self.plant.supplies
        ion = beam._ions[0][0]
        low, high = 3.0, 6.0
        for _ in range(50):
            amps = 0.5 * (low + high)
            assert self.ask("magnet", "set", amps) == (0,)
            self.go(self.now + 30.0)
            axis = beam.axis(self.plant.magnet.tesla(self.now), supplies["esa"].volts(self.now))
            low, high = (amps, high) if axis < ion else (low, amps)
        assert self.plant.ions(self.now) > 5e5


def test_an_output_that_was_stuck_follows_again_when_the_fault_ends() -> None:
    bench = Bench()
    bench.fault("output stuck", at=6.0, role="accelerating", lasts=10.0)
    bench.go(7.0)
    assert bench.ask("accelerating", "disable") == (0,)
    bench.go(15.0)
    assert bench.plant.supplies["accelerating"].nominal(15.0) == pytest.approx(8000.0)
    bench.go(16.0 + 0.5 * math.log(200.0))  # from the fault's end it falls through its bleeder
    assert bench.plant.supplies["accelerating"].nominal(bench.now) == pytest.approx(40.0, rel=1e-6)


def test_a_stuck_magnet_follows_again_when_the_fault_ends() -> None:
    bench = Bench()
    bench.fault("output stuck", at=6.0, role="magnet", lasts=10.0)
    bench.go(7.0)
    assert bench.ask("magnet", "set", 3.0) == (0,)
    bench.go(15.0)
    assert bench.plant.magnet.amps(15.0) == pytest.approx(4.0, abs=1e-6)
    bench.go(17.0)
    assert bench.plant.magnet.amps(17.0) == pytest.approx(3.0, abs=1e-6)


def test_a_deviation_changes_the_truth_from_its_beginning_and_not_before() -> None:
    bench = Bench()
    supply = bench.plant.supplies["accelerating"]
    before = supply.volts(5.9)
    bench.fault("output deviates", at=6.0, role="accelerating", size=0.05, lasts=4.0)
    bench.go(8.0)
    assert supply.volts(5.9) == before
    assert supply.volts(7.0) / before == pytest.approx(1.05, rel=1e-4)
    bench.go(12.0)
    assert supply.volts(11.0) == pytest.approx(before, rel=1e-4)
    assert supply.volts(7.0) / before == pytest.approx(1.05, rel=1e-4)
    assert supply.events_between(5.0, 12.0) == [6.0, 10.0]


def test_a_magnet_that_deviates_has_another_field_and_not_only_another_reading() -> None:
    bench = Bench()
    before = bench.plant.magnet.tesla(5.9)
    bench.fault("output deviates", at=6.0, role="magnet", size=0.02, lasts=20.0)
    bench.go(25.0)
    assert bench.plant.magnet.amps(25.0) == pytest.approx(4.08, abs=1e-6)
    assert bench.plant.magnet.tesla(25.0) / before == pytest.approx(1.02, abs=1e-3)
    assert bench.world.twins["magnet"].report()[2][0] == pytest.approx(4.08, abs=1e-4)
    bench.go(50.0)
    assert bench.plant.magnet.amps(50.0) == pytest.approx(4.0, abs=1e-6)


def test_no_fault_drives_more_than_the_compliance_can() -> None:
    """V = R I at rest: 40 V through 2 ohm is 20 A, whatever a regulator wants."""
    bench = Bench()
    bench.fault("output deviates", at=6.0, role="magnet", size=9.0)
    bench.go(120.0)
    assert 19.9 < bench.plant.magnet.amps(120.0) < 20.0


def test_a_device_keeps_to_the_slope_it_was_given() -> None:
    bench = Bench()
    assert bench.ask("accelerating", "set_limits", 8200.0, 500.0, 0.0) == (0,)
    assert bench.ask("magnet", "set_limits", 10.5, 0.1, 0.0) == (0,)
    bench.ask("accelerating", "set", 7000.0)
    bench.ask("magnet", "set", 2.0)
    bench.go(6.0)
    # 2.1 % of a step is left to the supply's settling
    assert bench.plant.supplies["accelerating"].nominal(6.0) == pytest.approx(8000 - 500 * 0.979, abs=1e-6)
    assert bench.plant.magnet.amps(6.0) == pytest.approx(3.9, abs=1e-6)


def test_a_contactor_does_not_drop_after_its_chain_was_closed_again() -> None:
    bench = Bench()
    bench.fault("cover open", at=6.0, lasts=2.0)
    bench.go(7.0)
    assert not bench.plant.supplies["accelerating"].enabled
    bench.ask("permit", "disable")
    bench.go(8.001)
    assert bench.ask("permit", "enable") == (0,)
    assert bench.ask("accelerating", "enable") == (0,)
    bench.go(9.0)
    assert bench.plant.supplies["accelerating"].enabled


@pytest.mark.parametrize("role", ["magnet", "probe", "nobody"])
def test_an_arc_where_no_high_voltage_is_is_refused(role: str) -> None:
    with pytest.raises(ValueError, match="not a high-voltage supply"):
        Bench().fault("arc", at=6.0, role=role)


@pytest.mark.parametrize("what", ["detector off", "chain"])
def test_a_gate_that_is_interrupted_counts_what_came_before(what: str) -> None:
    """Against a sum over 20 000 instants of ions times efficiency, which knows of no events."""
    bench = Bench()
    bench.find_peak()
    plant, start = bench.plant, bench.now
    assert bench.ask("counter", "gate", 2.0) == (0,)
    bench.go(start + 0.8)
    bench.ask("detector", "disable") if what == "detector off" else bench.ask("permit", "disable")
    bench.go(start + 2.0)
    answer = bench.ask("counter", "gate_read")
    assert answer is not None
    rates = [
        plant.ions(t) * plant.counter.efficiency(plant.supplies["detector"].volts(t))
        for t in (start + 2.0 * (np.arange(20000) + 0.5) / 20000).tolist()
    ]
    expected = plant.counter.observed_rate(float(np.mean(rates))) * 2.0
    assert 0.35e6 < expected < 1.3e6
    assert answer[4] == pytest.approx(expected, rel=8e-3)


def test_the_truth_does_not_depend_on_who_asks_or_in_which_order() -> None:
    """The same commands; one plant is asked backwards and often, the other once."""
    times = (4.9 + 0.037 * np.arange(60)).tolist()

    def history(bench: Bench) -> None:
        bench.ask("magnet", "set", 4.2)
        bench.ask("accelerating", "set", 7900.0)
        bench.go(6.0)
        bench.ask("magnet", "set", 4.1)
        bench.go(8.0)

    def truths(bench: Bench, t: float) -> tuple[float, ...]:
        plant = bench.plant
        return (
            plant.magnet.tesla(t), plant.magnet.amps(t), plant.ions(t),
            *(plant.supplies[role].volts(t) for role in ("accelerating", "esa", "detector")),
        )  # fmt: skip

    quiet, watched = Bench(), Bench()
    history(quiet)
    history(watched)
    backwards = {t: truths(watched, t) for _ in range(3) for t in reversed(times)}
    assert [truths(quiet, t) for t in times] == [backwards[t] for t in times]


def test_jiles_atherton_answers_in_any_order_too() -> None:
    bench = Bench(replace(SPEC, magnet=replace(SPEC.magnet, hysteresis="jiles-atherton")))
    bench.ask("magnet", "set", 6.0)
    times = (5.0 + 0.05 * np.arange(20)).tolist()
    forward = [bench.plant.magnet.tesla(t) for t in times]
    assert forward == [bench.plant.magnet.tesla(t) for t in reversed(times)][::-1]
    assert forward[10] > forward[2]
