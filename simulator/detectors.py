"""Counter and electrometer: what they make of a beam during a gate."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence

import numpy as np

from simulator.constants import E_CHARGE, K_B
from simulator.noise import Normals
from simulator.spec import DetectorSpec

# Gauss-Legendre nodes and weights on [0, 1], three points: exact to fifth degree.
NODES = (0.5 - math.sqrt(0.15), 0.5, 0.5 + math.sqrt(0.15))
WEIGHTS = (5.0 / 18.0, 8.0 / 18.0, 5.0 / 18.0)
GAUSSIAN_ABOVE = 200.0  # expected counts from which the renewal process is drawn as a normal number

Rate = Callable[[float], float]


def mean_rate(rate: Rate, start: float, end: float, cuts: Sequence[float] = ()) -> float:
    """Mean of a rate over an interval, by Gauss-Legendre between the cuts (commands)."""
    edges = [start, *cuts, end]
    total = 0.0
    for low, high in itertools.pairwise(edges):
        width = high - low
        for node, weight in zip(NODES, WEIGHTS, strict=True):
            total += weight * width * rate(low + node * width)
    return total / (end - start)


class Counter:
    """Pulse counter with dead time. Counts of a gate are drawn from the renewal process.

    Non-paralyzable: mean n t/(1 + n tau), variance n t/(1 + n tau)^3; paralyzable: mean
    n t e^(-n tau), variance of that mean times 1 - 2 n tau e^(-n tau). Asymptotic renewal theory.
    """

    def __init__(self, spec: DetectorSpec, rng: np.random.Generator) -> None:
        self.spec = spec
        self.dead_time = max(0.0, spec.dead_time + spec.dead_time_u * float(rng.standard_normal()))
        self._rng, self._normal = rng, Normals(rng)

    def efficiency(self, detector_volts: float) -> float:
        """Share of ions that make a pulse: a plateau that ends some 15 % below the working voltage."""
        x = (detector_volts / self.spec.detector_volts - 0.85) / 0.01
        return 0.0 if x < -40 else 1.0 / (1.0 + math.exp(-min(x, 40.0)))

    def observed_rate(self, true_rate: float) -> float:
        """Mean pulse rate in 1/s for a true rate."""
        if self.spec.paralyzable:
            return true_rate * math.exp(-true_rate * self.dead_time)
        return true_rate / (1.0 + true_rate * self.dead_time)

    def draw(self, true_rate: float, seconds: float) -> float:
        """Pulses in a gate."""
        n = true_rate + self.spec.dark_rate
        load = n * self.dead_time
        mean = self.observed_rate(n) * seconds
        if mean < GAUSSIAN_ABOVE:
            # at such counts dead time changes the variance by less than the counts can show
            return float(self._rng.poisson(mean))
        fano = 1.0 - 2.0 * load * math.exp(-load) if self.spec.paralyzable else 1.0 / (1.0 + load) ** 2
        return max(0.0, float(round(mean + math.sqrt(mean * fano) * self._normal())))


class Electrometer:
    """Resistor, single-pole response, Johnson and shot noise, baseline that wanders a little.

    The filter's state is advanced at every change of the beam, so a gate's mean is closed form.
    """

    def __init__(self, spec: DetectorSpec, rng: np.random.Generator) -> None:
        self.spec = spec
        self.gain = spec.gain + spec.gain_u * float(rng.standard_normal())
        self.baseline = 20e-6 * float(rng.standard_normal())  # V
        self._normal = Normals(rng)
        self._at, self._volts = 0.0, 0.0
        self._gate_volts = 0.0  # the filter's output when the gate was opened

    def open_gate(self, t: float, ions_per_second: float) -> None:
        """Remember where the filter stands: somebody may look at the meter during the gate."""
        self._gate_volts = self.advance(t, ions_per_second)

    def input_volts(self, ions_per_second: float) -> float:
        return self.gain * ions_per_second * E_CHARGE * self.spec.resistance

    def advance(self, t: float, ions_per_second: float) -> float:
        """Move the filter to time ``t`` with the beam that has flowed since the last call; V."""
        if t > self._at:
            goal = self.input_volts(ions_per_second)
            share = math.exp(-(t - self._at) / self.spec.time_constant) if self.spec.time_constant else 0.0
            self._volts = goal + (self._volts - goal) * share
            self._at = t
        return self._volts

    def draw(self, ions_per_second: float, seconds: float) -> float:
        """Volt-seconds of the gate that was opened last, of a steady beam."""
        goal, tau = self.input_volts(ions_per_second), self.spec.time_constant
        lag = (self._gate_volts - goal) * tau * (1.0 - math.exp(-seconds / tau)) if tau else 0.0
        # a boxcar mean over t has noise bandwidth 1/(2t): V^2 = 2kTR/t (Johnson), and shot noise alike
        johnson = 2.0 * K_B * self.spec.kelvin * self.spec.resistance * seconds
        shot = ions_per_second * seconds * (E_CHARGE * self.spec.resistance) ** 2
        noise = math.sqrt(johnson + max(0.0, shot)) * self._normal()
        return (goal + self.baseline) * seconds + lag + noise
