"""Random processes that are functions of time: whoever asks, in whatever order, gets the same answer.

A process that remembered its last sample would make the truth depend on who observes it. So drifts and
flickers are drawn once, as a periodic table with a 1/f power spectrum between two periods, and looked
up by straight lines. Only measurement noise is drawn in order, from blocks, one generator a device.
"""

from __future__ import annotations

import math

import numpy as np

BLOCK = 1024
TABLE = 4096  # points; a table repeats after TABLE / POINTS_PER_PERIOD of its shortest periods
POINTS_PER_PERIOD = 4


class Wander:
    """Zero-mean process of standard deviation ``rms`` with power between two periods, in s."""

    def __init__(self, rng: np.random.Generator, rms: float, *, shortest: float, longest: float) -> None:
        self._per_second = POINTS_PER_PERIOD / shortest
        frequency = np.fft.rfftfreq(TABLE, 1.0 / self._per_second)
        inside = (frequency >= 1.0 / longest) & (frequency <= 1.0 / shortest)
        amplitude = np.zeros(frequency.size)
        amplitude[inside] = frequency[inside] ** -0.5
        phase = rng.uniform(0.0, 2.0 * math.pi, frequency.size)
        table = np.fft.irfft(amplitude * np.exp(1j * phase), TABLE)
        self._table: list[float] = (rms * table / table.std()).tolist()
        self._table.append(self._table[0])
        self._still = rms == 0.0

    def __call__(self, t: float) -> float:
        if self._still:
            return 0.0
        place = t * self._per_second % TABLE
        index = int(place)
        here = self._table[index]
        return here + (place - index) * (self._table[index + 1] - here)


class Normals:
    """Standard normal numbers one at a time, drawn in blocks."""

    def __init__(self, rng: np.random.Generator) -> None:
        self._rng = rng
        self._block: list[float] = []

    def __call__(self) -> float:
        if not self._block:
            self._block = self._rng.standard_normal(BLOCK).tolist()
        return self._block.pop()
