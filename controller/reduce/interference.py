"""Isobars: the part of an ion's signal that belongs to another element, from a monitor ion.

    J_on = I_on - r (m_interfering / m_monitor)^-beta  J_monitor

r is the true ratio interfering/monitor, fractionated like everything the instrument measures. beta
comes from the corrected intensities themselves, and a monitor may carry an isobar of its own, so the
equations are passed through until nothing changes: two to four passes for small corrections.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import NamedTuple

from controller.reduce.massbias import Normaliser, exponent, fractionated

PASSES_MAX = 50  # a correction of a tenth of the signal converges by a factor of ten a pass
TOLERANCE = 1e-13


class Isobar(NamedTuple):
    """``ratio``: true interfering/monitor; masses in u."""

    on: str
    monitor: str
    ratio: float
    interfering_mass: float
    monitor_mass: float


class Resolved(NamedTuple):
    """Intensities free of isobars, the exponent found with them (0 without a normaliser; NaN where
    the normalising ratio is not positive or the passes do not settle), and the number of passes."""

    intensities: dict[str, float]
    beta: float
    passes: int


def resolve(
    measured: Mapping[str, float], isobars: Sequence[Isobar], normaliser: Normaliser | None
) -> Resolved:
    """Subtract all isobars and find the mass bias exponent, to their common fixed point."""
    pure, beta = dict(measured), 0.0
    for passes in range(1, PASSES_MAX + 1):
        before, beta_before = pure, beta
        pure = dict(measured)
        for isobar in isobars:
            ratio = fractionated(isobar.ratio, isobar.interfering_mass, isobar.monitor_mass, beta)
            pure[isobar.on] -= ratio * before[isobar.monitor]
        if normaliser is not None:
            beta = _beta(pure, normaliser)
            if math.isnan(beta):
                break
        if not isobars:
            return Resolved(pure, beta, passes)
        if abs(beta - beta_before) <= TOLERANCE * (1.0 + abs(beta)) and all(
            abs(pure[ion] - before[ion]) <= TOLERANCE * abs(measured[ion]) for ion in pure
        ):
            return Resolved(pure, beta, passes)
    return Resolved(pure, math.nan, passes)


def _beta(intensities: Mapping[str, float], normaliser: Normaliser) -> float:
    denominator = intensities[normaliser.denominator]
    if denominator <= 0:
        return math.nan
    return exponent(
        intensities[normaliser.numerator] / denominator,
        normaliser.value,
        normaliser.numerator_mass,
        normaliser.denominator_mass,
    )
