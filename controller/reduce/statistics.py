"""Statistics of group values: scatter, correlation, comparison with counting.

The rule for the statistical uncertainty, fixed before any run: the standard error of the weighted
mean of group values; multiplied by sqrt((1 + rho)/(1 - rho)) when the lag-1 autocorrelation rho of
the groups stands more than 2/sqrt(groups) above zero (an AR(1) series; a white one is left alone).
From eight groups on it is never replaced by the counting uncertainty when that happens to be larger or
smaller: the reduced chi-squared says which, for a person to read. With fewer groups counting
statistics is its lower bound, and a note says when that acts (``scatter.py``). No value is rejected
for being far from the others.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from controller.reduce.deadtime import Array

AUTOCORRELATION_MAX = 0.9  # beyond this a run is one long drift and no factor makes it honest


def weighted_mean_error(values: Array, weights: Array) -> float:
    """Standard error of the weighted mean, for variances proportional to 1/weight; two or more."""
    mean = np.average(values, weights=weights)
    scatter = float(np.sum(weights * (values - mean) ** 2)) / (len(values) - 1)
    return math.sqrt(scatter / float(weights.sum()))


def autocorrelation(values: Array) -> float | None:
    """Lag-1 autocorrelation; None for fewer than four values or no scatter."""
    if len(values) < 4:
        return None
    away = values - values.mean()
    power = float(away @ away)
    return float(away[1:] @ away[:-1]) / power if power > 0 else None


def inflation(rho: float | None, groups: int) -> float:
    """Factor on the standard error for correlated groups, by the rule above."""
    if rho is None or rho <= 2.0 / math.sqrt(groups):
        return 1.0
    rho = min(rho, AUTOCORRELATION_MAX)
    return math.sqrt((1.0 + rho) / (1.0 - rho))


def reduced_chi2(values: Array, variances: Array, weights: Array) -> float | None:
    """Scatter over counting variance; 1 where counting explains everything. None where undefined."""
    if len(values) < 2 or not np.all(variances > 0):
        return None
    mean = np.average(values, weights=weights)
    return float(np.sum((values - mean) ** 2 / variances)) / (len(values) - 1)


def effective_dof(parts: Sequence[tuple[float, float]]) -> float:
    """Welch-Satterthwaite (JCGM 100, G.4.1): u^4 / sum(u_i^4 / nu_i) from (u_i, nu_i)."""
    total = sum(u * u for u, _ in parts)
    below = sum(u**4 / nu for u, nu in parts if math.isfinite(nu))
    return total * total / below if below > 0 else math.inf
