"""Student's t for coverage factors, without a statistics package at run time.

P(|T| < t) = 1 - I_x(nu/2, 1/2) with x = nu/(nu + t^2) and I the regularised incomplete beta function,
evaluated by its continued fraction (modified Lentz's method).
"""

from __future__ import annotations

import math
from statistics import NormalDist

COVERAGE = 0.95  # probability of the intervals that are printed
FRACTION_STEPS_MAX = 500
NORMAL_FROM_DOF = 1e6  # beyond this the normal distribution is the same to 1e-6


def coverage_factor(dof: float, probability: float = COVERAGE) -> float:
    """Half width of the two-sided interval in standard uncertainties; ``dof`` need not be whole."""
    if dof > NORMAL_FROM_DOF:
        return NormalDist().inv_cdf(0.5 + probability / 2)
    low, high = 0.0, 1.0
    while _within(high, dof) < probability:
        low, high = high, 2.0 * high
    while True:
        middle = 0.5 * (low + high)
        if middle in (low, high):
            return middle
        low, high = (middle, high) if _within(middle, dof) < probability else (low, middle)


def _within(t: float, dof: float) -> float:
    return 1.0 - incomplete_beta(dof / 2.0, 0.5, dof / (dof + t * t))


def incomplete_beta(a: float, b: float, x: float) -> float:
    """Regularised incomplete beta function for a, b > 0 and 0 <= x <= 1."""
    if x <= 0.0 or x >= 1.0:
        return 0.0 if x <= 0.0 else 1.0
    if x > (a + 1.0) / (a + b + 2.0):  # the fraction converges fast only below this
        return 1.0 - incomplete_beta(b, a, 1.0 - x)
    log_front = math.lgamma(a + b) - math.lgamma(a) - math.lgamma(b)
    front = math.exp(log_front + a * math.log(x) + b * math.log1p(-x))
    c, d = 1.0, 1.0 / (1.0 - (a + b) * x / (a + 1.0))
    value = d
    for m in range(1, FRACTION_STEPS_MAX):
        even = m * (b - m) * x / ((a + 2 * m - 1) * (a + 2 * m))
        d, c = 1.0 / (1.0 + even * d), 1.0 + even / c
        value *= d * c
        odd = -(a + m) * (a + b + m) * x / ((a + 2 * m) * (a + 2 * m + 1))
        d, c = 1.0 / (1.0 + odd * d), 1.0 + odd / c
        value *= d * c
        if abs(d * c - 1.0) < 1e-15:
            break
    return front * value / a
