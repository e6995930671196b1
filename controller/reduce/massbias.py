"""Instrumental mass bias by the exponential law.

    R_true = R_measured (m_i / m_j)^beta        beta = ln(R_N / R_N,measured) / ln(m_a / m_b)

for the ratio of isotopes i over j, normalised to the known ratio R_N of a over b. Masses are atomic
or molecular masses in u; ion masses would change a ratio by about 1e-10 of itself.
"""

from __future__ import annotations

import math
from typing import NamedTuple


class Normaliser(NamedTuple):
    """The ratio taken as known: ions a and b, its true value, their masses in u."""

    numerator: str
    denominator: str
    value: float
    numerator_mass: float
    denominator_mass: float


def exponent(measured: float, true: float, numerator_mass: float, denominator_mass: float) -> float:
    """The law's beta; NaN where either ratio is not positive."""
    if not (measured > 0 and true > 0):
        return math.nan
    return math.log(true / measured) / math.log(numerator_mass / denominator_mass)


def corrected(measured: float, numerator_mass: float, denominator_mass: float, beta: float) -> float:
    """The true ratio from a measured one."""
    return measured * math.pow(numerator_mass / denominator_mass, beta)


def fractionated(true: float, numerator_mass: float, denominator_mass: float, beta: float) -> float:
    """The ratio that the instrument would measure: the inverse of ``corrected``."""
    return true * math.pow(numerator_mass / denominator_mass, -beta)
