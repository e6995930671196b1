"""Dead time: from observed to true pulse rates, and what it does to counting statistics.

With true rate n, observed rate m and dead time t (renewal theory):

    non-paralyzable   m = n / (1 + n t)      n = m / (1 - m t)               any n
    paralyzable       m = n exp(-n t)        n t = -W0(-m t), m t <= 1/e     n < 1/t only

Observed counts are sub-Poisson: variance = Fano factor x mean, with Fano factors (1 + n t)^-2 and
1 - 2 n t exp(-n t) for gates much longer than t. A rate that no true rate can give is NaN: the caller
marks the gate, it is never clamped.
"""

from __future__ import annotations

import math
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Kind = Literal["non-paralyzable", "paralyzable"]
Array = NDArray[np.float64]

NEWTON_STEPS_MAX = 80  # at the very maximum convergence halves the error a step; elsewhere 4 to 6


def true_rates(observed: Array, dead_seconds: float, kind: Kind) -> Array:
    """True rates in 1/s from observed ones; NaN where the observed rate is impossible."""
    busy = observed * dead_seconds
    with np.errstate(divide="ignore", invalid="ignore"):
        if kind == "non-paralyzable":
            return np.where(busy < 1.0, observed / (1.0 - busy), np.nan)
        # exp(n t) is the factor from observed to true; it is 1 also where nothing was observed
        return observed * np.exp(_busy_true(busy))


def _busy_true(busy: Array) -> Array:
    """Solve x exp(-x) = busy for the branch x < 1 by Newton's method; NaN above 1/e.

    x exp(-x) rises and is concave below 1, so that steps from the left never overshoot.
    """
    possible = busy <= math.exp(-1.0)
    target = np.where(possible, busy, 0.0)
    x = target.copy()  # left of the root: x exp(-x) is nowhere above x
    for _ in range(NEWTON_STEPS_MAX):
        fall = np.exp(-x)
        slope = np.maximum(fall * (1.0 - x), 1e-9)
        step = (target - x * fall) / slope
        x = np.minimum(x + step, 1.0)
        if np.all(np.abs(step) <= 1e-15 * (1.0 + np.abs(x))):
            break
    return np.where(possible, x, np.nan)


def fano_factor(true: Array, dead_seconds: float, kind: Kind) -> Array:
    """Variance over mean of the observed counts, for gates much longer than the dead time."""
    busy = true * dead_seconds
    if kind == "non-paralyzable":
        return np.asarray((1.0 + busy) ** -2)
    return np.asarray(1.0 - 2.0 * busy * np.exp(-busy))


def true_rate_variances(true: Array, live_seconds: Array, dead_seconds: float, kind: Kind) -> Array:
    """Counting variance of corrected rates in 1/s^2; the dead time's own uncertainty is not in it.

    Non-paralyzable: n (1 + n t) / T. Paralyzable: Fano factor x exp(n t) n / (T (1 - n t)^2).
    """
    busy = true * dead_seconds
    if kind == "non-paralyzable":
        return np.asarray(true * (1.0 + busy) / live_seconds)
    with np.errstate(divide="ignore", invalid="ignore"):
        gain = np.exp(busy) / (1.0 - busy) ** 2
        return np.asarray(fano_factor(true, dead_seconds, kind) * gain * true / live_seconds)
