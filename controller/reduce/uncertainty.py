"""Combined uncertainty (JCGM 100): scatter of groups, and every input quantity shifted by its u.

A systematic input's contribution is found by doing the whole reduction twice more, with the input at
its value plus and minus u, and halving the difference: no derivative is written by hand, so none can
be forgotten. Contributions keep their sign: two ratios of one run share inputs, and only signed
contributions give their covariance.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from typing import NamedTuple

import numpy as np

from controller.reduce.deadtime import Array
from controller.reduce.statistics import effective_dof
from controller.reduce.student import coverage_factor


class Combined(NamedTuple):
    """``expanded`` is the half width of the 95 % interval, ``coverage`` times ``u``."""

    u: float
    expanded: float
    coverage: float
    dof: float


def contributions(
    reduce: Callable[[Mapping[str, float]], Array], values: Mapping[str, float], u: Mapping[str, float]
) -> dict[str, Array]:
    """Signed contribution of each input with an uncertainty to each output of ``reduce``."""
    found = {}
    for name, shift in u.items():
        if shift > 0:
            high = reduce({**values, name: values[name] + shift})
            low = reduce({**values, name: values[name] - shift})
            found[name] = (high - low) / 2
    return found


def combine(u_statistical: float, dof: float, components: Sequence[float]) -> Combined:
    """Root sum of squares; the systematic components count as exactly known (infinite dof)."""
    u = math.hypot(u_statistical, *components)
    total_dof = effective_dof([(u_statistical, dof), *((part, math.inf) for part in components)])
    coverage = coverage_factor(total_dof)
    return Combined(u, coverage * u, coverage, total_dof)


def covariance(statistical: Array, systematic: Mapping[str, Array]) -> Array:
    """Joint covariance of all outputs from the statistical one and signed contributions."""
    total = np.array(statistical)
    for signed in systematic.values():
        total += np.outer(signed, signed)
    return total
