"""The turning-point stack against a brute-force grid of 200 x 200 relays, on the same inputs."""

from __future__ import annotations

import math
import time

import numpy as np
from numpy.typing import NDArray

from benchmarks.figure import Figure
from simulator.hysteresis import Preisach

SIDE = 200
REACH = 8.0  # relays switch between -REACH and REACH, in units of the density's width
INPUTS = 2000


class RelayGrid:
    """Every relay of the half plane a >= b, each with its share of the density; the slow, plain way."""

    def __init__(self) -> None:
        edges = np.linspace(-REACH, REACH, SIDE + 1)
        middle = 0.5 * (edges[:-1] + edges[1:])
        share = np.diff(1.0 / (1.0 + np.exp(-edges)))
        self._up, self._down = np.meshgrid(middle, middle, indexing="ij")
        weight = 2.0 * np.outer(share, share)
        weight[self._up < self._down] = 0.0
        weight[self._up == self._down] *= 0.5
        self._weight: NDArray[np.float64] = weight / weight.sum()
        self._state = -np.ones_like(weight)

    def advance(self, u: float) -> float:
        """Move every relay and sum them all."""
        self._state[u >= self._up] = 1.0
        self._state[u <= self._down] = -1.0
        return float((self._weight * self._state).sum())


def measure() -> list[Figure]:
    inputs = np.random.default_rng(3).uniform(-4.0, 4.0, INPUTS).tolist()
    grid = RelayGrid()
    start = time.perf_counter()
    slow = [grid.advance(u) for u in inputs]
    slow_seconds = time.perf_counter() - start
    model = Preisach(1.0)
    state = model.start(())
    fast = []
    start = time.perf_counter()
    for u in inputs:
        state = model.advance(state, u)
        fast.append(model.output(state))
    fast_seconds = time.perf_counter() - start
    worst = max(abs(a - b) for a, b in zip(fast, slow, strict=True))
    # a relay may be half a cell from where the input turned: two densities of at most 1/4 per width
    cell = 2.0 * REACH / SIDE
    allowed = 2.0 * 0.5 * cell
    ratio = slow_seconds / fast_seconds
    return [
        Figure(
            "hysteresis update",
            f"{1e6 * fast_seconds / INPUTS:.1f} us",
            f"{SIDE} x {SIDE} relays {1e6 * slow_seconds / INPUTS:.0f} us",
            f"{ratio:.0f} times faster",
            "at least 50 times, equal within the grid's error",
            ratio >= 50 and worst <= allowed and math.isfinite(worst),
            f"largest difference {worst:.4f}, grid error {allowed:.4f}, {INPUTS} random inputs",
        )
    ]
