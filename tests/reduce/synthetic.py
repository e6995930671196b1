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
                    found.append(_row(plan, stop, (block, cycle), (now, seconds), beam, rng))
                    now += seconds
    return found


def _beam(plan: Plan, length: float, rng: np.random.Generator) -> np.ndarray:
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
    return np.concatenate([[0.0], np.cumsum(strength) * GRID])


def _row(plan, stop, place, gate, beam, rng) -> DetectorRow:
    begin, seconds = gate
    grid = np.array([begin, begin + seconds]) / GRID
    integral = np.diff(np.interp(grid, np.arange(len(beam)), beam))[0]
    rate = stop.rate(begin + seconds / 2) if callable(stop.rate) else stop.rate
    n = rate * integral / seconds + stop.constant
    if stop.detector == "counter":
        observed = n / (1 + n * plan.dead)
        if observed < 2000:
            total = float(rng.poisson(observed * seconds))
        else:
            spread = math.sqrt(n * seconds / (1 + n * plan.dead) ** 3)
            total = float(round(rng.normal(observed * seconds, spread)))
    else:
        ions = rng.normal(n * plan.gain * seconds, math.sqrt(n * plan.gain * seconds))
        noise = math.sqrt(2 * 1.380649e-23 * plan.kelvin * plan.resistance / seconds) * rng.standard_normal()
        total = ions * 1.602176634e-19 * plan.resistance + noise * seconds
    return DetectorRow(
        block=place[0],
        cycle=place[1],
        station=stop.station,
        stop=stop.label,
        kind=stop.kind,
        detector=stop.detector,
        started_ns=round(begin * 1e9),
        ended_ns=round((begin + seconds) * 1e9),
        live_seconds=seconds,
        total=total,
        overrange=False,
        mass_to_charge=stop.mass_to_charge,
        accel_volts=8000.0,
        esa_volts=960.0,
        field_tesla=0.4,
        flags="",
    )
