"""How to share counting time between peaks (pure)."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple


class Share(NamedTuple):
    """Seconds per peak, and the relative standard uncertainty of the quantity they serve."""

    seconds: tuple[float, ...]
    u_relative: float


def optimal_share(
    coefficients: Sequence[float], rates: Sequence[float], backgrounds: Sequence[float], total_seconds: float
) -> Share:
    """Split ``total_seconds`` so that ln y = sum c_k ln n_k has the least variance.

    ``rates`` and known ``backgrounds`` in 1/s. Lagrange: t_k proportional to |c_k| sqrt(n_k + b_k) / n_k,
    and the least variance is (sum |c_k| sqrt(n_k + b_k) / n_k)^2 / T. Raises ValueError for a rate or a
    total that is not above zero.
    """
    if total_seconds <= 0 or any(rate <= 0 for rate in rates):
        raise ValueError("rates and the total time must be above zero")
    weights = [
        abs(c) * math.sqrt(n + b) / n for c, n, b in zip(coefficients, rates, backgrounds, strict=True)
    ]
    whole = sum(weights)
    if whole == 0:
        raise ValueError("no coefficient is different from zero")
    return Share(tuple(total_seconds * w / whole for w in weights), whole / math.sqrt(total_seconds))


def counting_u(
    coefficients: Sequence[float], rates: Sequence[float], seconds: Sequence[float], cycles: int
) -> float:
    """Relative standard uncertainty of y from counting alone: u^2 = (1/N) sum c_k^2 / (n_k t_k)."""
    return math.sqrt(
        sum(c * c / (n * t) for c, n, t in zip(coefficients, rates, seconds, strict=True)) / cycles
    )
