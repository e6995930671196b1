"""Hysteresis as a function of the turning points alone: Preisach, and Jiles-Atherton as another family.

A state is an immutable tuple, so that any past state can be kept and asked again. ``advance`` moves a
state monotonically to a new input; ``output`` reads it. Outputs are the hysteretic part, of order one.

Preisach: the classical scalar model with the product density, whose Everett function is
E(a, b) = (F(a) - F(b))^2 with the logistic F. Its stack of turning points has the wiping-out and the
congruency property (Mayergoyz). Jiles-Atherton: the 1986 differential form with the usual clamp.
"""

from __future__ import annotations

import math
from typing import Any, Protocol

State = tuple[Any, ...]
FLOOR = -math.inf


class Hysteresis(Protocol):
    def start(self, memory: tuple[float, ...]) -> State: ...

    def advance(self, state: State, u: float) -> State: ...

    def output(self, state: State) -> float: ...


class Preisach:
    """A state is the present input with its turning points behind it, as a chain of immutable links
    (input, F(input), output, link before). A step costs one F, however long the memory."""

    def __init__(self, sigma: float) -> None:
        self._sigma = sigma

    def start(self, memory: tuple[float, ...] = (0.0,)) -> State:
        """From negative saturation through the inputs of ``memory``."""
        state: State = (FLOOR, 0.0, -1.0, None)
        for u in memory:
            state = self.advance(state, u)
        return state

    def advance(self, state: State, u: float) -> State:
        last, before = state[0], state[3]
        if u == last:
            return state
        rising = u > last
        # where the same branch goes on, the present input was no turning point
        base = before if before is not None and (last > before[0]) is rising else state
        # wiping-out: a pair of turning points is forgotten once the input passes the outer one
        while (outer := base[3]) is not None and outer[3] is not None:
            if (u < outer[0]) if rising else (u > outer[0]):
                break
            base = outer[3]
        x = u / self._sigma
        share = 1.0 / (1.0 + math.exp(-x)) if x > -700.0 else 0.0
        step = share - base[1]
        # the Everett function of a branch, twice, with the branch's sign
        return (u, share, base[2] + 2.0 * step * abs(step), base)

    def output(self, state: State) -> float:
        return float(state[2])


class JilesAtherton:
    """State (input, magnetisation); field in A/m = input * field_per_input.

    dM/dH = (1/(1+c)) (Man - M)/(k s - alpha (Man - M)) + (c/(1+c)) dMan/dH, s the sign of dH, the first
    term zero while it would point against the change (clamp). The output is the magnetisation less its
    anhysteretic value, scaled so that a major loop's remanence is one half.
    """

    def __init__(
        self,
        *,
        field_per_input: float,
        saturation: float = 1.6e6,
        shape: float = 1100.0,
        coupling: float = 1.6e-3,
        pinning: float = 400.0,
        reversible: float = 0.2,
    ) -> None:
        self._per_input, self._ms, self._a = field_per_input, saturation, shape
        self._alpha, self._k, self._c = coupling, pinning, reversible
        self._scale = 0.5 / 587472.0 * 1.6e6 / saturation  # remanence of the standard set

    def start(self, memory: tuple[float, ...] = (0.0,)) -> State:
        state: State = (0.0, 0.0)
        for u in memory:
            state = self.advance(state, u)
        return state

    def magnetisation(self, state: State) -> float:
        """Magnetisation in A/m."""
        return float(state[1])

    def advance(self, state: State, u: float) -> State:
        h0, m = state[0] * self._per_input, state[1]
        h1 = u * self._per_input
        if h1 == h0:
            return (u, m)
        steps = max(1, math.ceil(abs(h1 - h0) / (self._a / 40.0)))
        step, sign = (h1 - h0) / steps, math.copysign(1.0, h1 - h0)
        for number in range(steps):
            h = h0 + number * step
            k1 = self._slope(h, m, sign)
            k2 = self._slope(h + step / 2, m + step / 2 * k1, sign)
            k3 = self._slope(h + step / 2, m + step / 2 * k2, sign)
            k4 = self._slope(h + step, m + step * k3, sign)
            m += step / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        return (u, m)

    def output(self, state: State) -> float:
        h, m = state[0] * self._per_input, state[1]
        anhysteretic = self._ms * _langevin(h / self._a)
        for _ in range(8):
            anhysteretic = self._ms * _langevin((h + self._alpha * anhysteretic) / self._a)
        return float((m - anhysteretic) * self._scale)

    def _slope(self, h: float, m: float, sign: float) -> float:
        x = (h + self._alpha * m) / self._a
        gap = self._ms * _langevin(x) - m
        irreversible = 0.0
        if gap * sign > 0:
            irreversible = gap / (self._k * sign - self._alpha * gap)
        reversible = self._ms / self._a * _langevin_slope(x)
        return (irreversible + self._c * reversible) / (1.0 + self._c)


def _langevin(x: float) -> float:
    if abs(x) < 1e-2:
        return x / 3.0 - x**3 / 45.0 + 2.0 * x**5 / 945.0
    return 1.0 / math.tanh(x) - 1.0 / x


def _langevin_slope(x: float) -> float:
    if abs(x) < 1e-2:
        return 1.0 / 3.0 - x * x / 15.0 + 2.0 * x**4 / 189.0
    if abs(x) > 300.0:
        return 1.0 / (x * x)
    return 1.0 / (x * x) - 1.0 / math.sinh(x) ** 2
