"""Background under an ion, interpolated in m/z between the background positions of its station.

At a position: dark rate (a counter's) plus the tail of neighbouring peaks. A position's value in a
block is the mean over the block's usable cycles. Between two positions the tail is taken as

    nearest      that of the nearer position
    linear       a straight line in m/z
    log-linear   a straight line in ln(tail) against m/z: the tail of a strong peak falls about
                 exponentially, and a chord over a convex curve lies too high

Beyond the outermost positions the outermost value holds; a tail is never extrapolated. For
log-linear the ratio of the geometric to the linear value comes from the means of the whole run: the
logarithm of a few counts would be biased low, by 1/(2N).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from controller.reduce.deadtime import Array
from controller.reduce.observations import Observations, Stop

Mode = Literal["none", "nearest", "linear", "log-linear"]


class Position(NamedTuple):
    """One background position over the run. Rates in 1/s, its u in 1/s from counting statistics."""

    stop: Stop
    blocks: Array  # mean in each block; the run's mean where a block has none
    mean: float
    u: float


class Under(NamedTuple):
    """Background under one ion: its value in each block, the dark part of it, and why it is not what
    was asked for ("" where it is)."""

    blocks: Array  # 1/s
    dark: float  # 1/s
    note: str


def positions(
    seen: Observations, rates: Array, variances: Array, usable: NDArray[np.bool_]
) -> list[Position]:
    """All background positions with at least one usable dwell, in the order of the stops."""
    found = []
    for code, stop in enumerate(seen.stops):
        if stop.kind != "background":
            continue
        chosen = np.flatnonzero((seen.stop == code) & usable)
        if not len(chosen):
            continue
        weight = np.bincount(seen.block[chosen], seen.live[chosen], seen.blocks)
        summed = np.bincount(seen.block[chosen], seen.live[chosen] * rates[chosen], seen.blocks)
        mean = float(summed.sum() / weight.sum())
        with np.errstate(invalid="ignore"):
            blocks = np.where(weight > 0, summed / weight, mean)
        variance = float(np.sum(seen.live[chosen] ** 2 * variances[chosen])) / float(weight.sum()) ** 2
        if stop.detector == "counter":
            variance = max(variance, float(weight.sum()) ** -2)  # no count at all: that of one count
        found.append(Position(stop, blocks, mean, math.sqrt(variance)))
    return found


def under(ion: Stop, found: Sequence[Position], *, mode: Mode, dark: float, blocks: int) -> Under:
    """Background under ``ion``, block by block. ``dark`` is the counter's dark rate in 1/s."""
    if ion.detector != "counter":
        dark = 0.0
    near = sorted(
        (p for p in found if p.stop.station == ion.station and p.stop.detector == ion.detector),
        key=lambda position: position.stop.mass_to_charge,
    )
    if mode == "none" or not near:
        missing = "" if mode == "none" else "no background position, only dark counts are taken off"
        return Under(np.full(blocks, dark), dark, missing)
    low, high, share = _neighbours(ion.mass_to_charge, [p.stop.mass_to_charge for p in near])
    if mode == "nearest":
        return Under(near[high if share > 0.5 else low].blocks, dark, "")
    linear = (1.0 - share) * near[low].blocks + share * near[high].blocks
    if mode == "linear":
        return Under(linear, dark, "")
    tails = near[low].mean - dark, near[high].mean - dark
    if min(tails) <= 0:
        return Under(linear, dark, "no tail above dark counts, background is linear in m/z")
    factor = log_linear(*tails, share) / ((1.0 - share) * tails[0] + share * tails[1])
    return Under(dark + (linear - dark) * factor, dark, "")


def log_linear(low: float, high: float, share: float) -> float:
    """Geometric interpolation at ``share`` of the way from low to high, both positive."""
    return math.exp((1.0 - share) * math.log(low) + share * math.log(high))


def _neighbours(at: float, places: Sequence[float]) -> tuple[int, int, float]:
    """Indices of the places on both sides and how far ``at`` lies from the first to the second."""
    if at <= places[0]:
        return 0, 0, 0.0
    for index in range(1, len(places)):
        if at <= places[index]:
            return index - 1, index, (at - places[index - 1]) / (places[index] - places[index - 1])
    return len(places) - 1, len(places) - 1, 0.0
