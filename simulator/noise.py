"""Random processes that are functions of time: whoever asks, in whatever order, gets the same answer.

A process that remembered its last sample would make the truth depend on who observes it. So drifts and
flickers are sums of sinusoids with seeded phases, spread over a band of frequencies in equal ratios
(a 1/f-like spectrum). Only measurement noise is drawn in order, from blocks, one generator a device.
"""

from __future__ import annotations

import math

import numpy as np

BLOCK = 1024


class Wander:
    """Zero-mean process of standard deviation ``rms`` with power between two periods, in s."""

    def __init__(
        self, rng: np.random.Generator, rms: float, *, shortest: float, longest: float, waves: int = 7
    ) -> None:
        spread = np.exp(rng.uniform(0.0, 1.0, waves)) / math.e
        ratios = np.linspace(0.0, 1.0, waves)
        periods = longest * (shortest / longest) ** ratios * spread
        self._amplitude = rms * math.sqrt(2.0 / waves)
        self._waves = tuple(
            (2.0 * math.pi / float(period), float(phase))
            for period, phase in zip(periods, rng.uniform(0.0, 2.0 * math.pi, waves), strict=True)
        )

    def __call__(self, t: float) -> float:
        if self._amplitude == 0.0:
            return 0.0
        sin = math.sin
        total = 0.0
        for rate, phase in self._waves:
            total += sin(rate * t + phase)
        return self._amplitude * total


class Normals:
    """Standard normal numbers one at a time, drawn in blocks."""

    def __init__(self, rng: np.random.Generator) -> None:
        self._rng = rng
        self._block: list[float] = []

    def __call__(self) -> float:
        if not self._block:
            self._block = self._rng.standard_normal(BLOCK).tolist()
        return self._block.pop()
