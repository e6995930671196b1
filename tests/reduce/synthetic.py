"""Detector rows of an invented run, drawn without any code of the reduction.

The beam drifts (straight line and parabola) and flickers (Ornstein-Uhlenbeck, integrated over each
dwell on a 50 ms grid). The counter has a true dead time; its counts are normal with the renewal
process's mean n t/(1 + n tau) and variance n t/(1 + n tau)^3, or Poisson below 2000 counts a second.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from controller.record.journal import DetectorRow

GRID = 0.05  # s


@dataclass(frozen=True)
class Stop:
    """``rate``: of the ions at the detector at beam 1, in 1/s; ``constant``: background in 1/s."""

    label: str
    rate: float | Callable[[float], float]
    dwell: float
    mass_to_charge: float = 0.0
    constant: float = 0.0
    kind: str = "ion"
    detector: str = "counter"
    station: str = "only"


@dataclass(frozen=True)
class Plan:
    stops: Sequence[Stop]
    blocks: int
    cycles: int  # a block
    settle: float = 0.5  # s before each dwell
    dead: float = 0.0  # s, true
    gates: int = 1
    drift: float = 0.0  # of the beam over the run
    curve: float = 0.0  # the same, parabola
    flicker: float = 0.0  # relative standard deviation
    flicker_time: float = 10.0  # s
    resistance: float = 1e11  # ohm
    kelvin: float = 300.0
    gain: float = 1.0  # true yield of the electrometer


def duration(plan: Plan) -> float:
    return plan.blocks * plan.cycles * sum(stop.dwell + plan.settle for stop in plan.stops)


def rows(plan: Plan, rng: np.random.Generator) -> list[DetectorRow]:
    """All gates of one run."""
    length = duration(plan)
    beam = _beam(plan, length, rng)
    found = []
    now = 0.0
    for block in range(plan.blocks):
        for cycle in range(plan.cycles):
            for stop in plan.stops:
                now += plan.settle
                for _ in range(plan.gates):
                    seconds = stop.dwell / plan.gates
                    mean, middle = _mean(beam, now, seconds), now + seconds / 2
                    rate = stop.rate(middle) if callable(stop.rate) else stop.rate
                    total = _total(plan, stop, rate * mean + stop.constant, seconds, rng)
                    found.append(_row(stop, block, cycle, now, seconds)._replace(total=total))
                    now += seconds
    return found


def _beam(plan: Plan, length: float, rng: np.random.Generator) -> list[float]:
    """Integral of the beam's strength from 0 to each point of the grid."""
    count = math.ceil(length / GRID) + 2
    u = (np.arange(count) + 0.5) * GRID / length
    strength = 1.0 + plan.drift * u + plan.curve * u * (1.0 - u)
    if plan.flicker:
        keep = math.exp(-GRID / plan.flicker_time)
        kicks = rng.standard_normal(count) * plan.flicker * math.sqrt(1 - keep**2)
        noise = np.empty(count)
        value = rng.standard_normal() * plan.flicker
        for index, kick in enumerate(kicks.tolist()):
            value = keep * value + kick
            noise[index] = value
        strength = strength * (1.0 + noise)
    return [0.0, *(np.cumsum(strength) * GRID).tolist()]


def _mean(beam: list[float], begin: float, seconds: float) -> float:
    def integral(t: float) -> float:
        index = int(t / GRID)
        share = t / GRID - index
        return (1 - share) * beam[index] + share * beam[index + 1]

    return (integral(begin + seconds) - integral(begin)) / seconds


def _total(plan: Plan, stop: Stop, n: float, seconds: float, rng: np.random.Generator) -> float:
    if stop.detector == "counter":
        observed = n / (1 + n * plan.dead)
        if observed < 2000:
            return float(rng.poisson(observed * seconds))
        spread = math.sqrt(n * seconds / (1 + n * plan.dead) ** 3)
        return float(round(rng.normal(observed * seconds, spread)))
    expected = n * plan.gain * seconds
    ions = rng.normal(expected, math.sqrt(expected))
    noise = math.sqrt(2 * 1.380649e-23 * plan.kelvin * plan.resistance / seconds) * rng.standard_normal()
    return float(ions * 1.602176634e-19 * plan.resistance + noise * seconds)


def _row(stop: Stop, block: int, cycle: int, begin: float, seconds: float) -> DetectorRow:
    return DetectorRow(
        block=block,
        cycle=cycle,
        station=stop.station,
        stop=stop.label,
        kind=stop.kind,
        detector=stop.detector,
        started_ns=round(begin * 1e9),
        ended_ns=round((begin + seconds) * 1e9),
        live_seconds=seconds,
        total=0.0,
        overrange=False,
        mass_to_charge=stop.mass_to_charge,
        accel_volts=8000.0,
        esa_volts=960.0,
        field_tesla=0.4,
        flags="",
    )
