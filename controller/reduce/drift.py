"""Peaks are read one after another while the beam drifts: weights that make them simultaneous.

For ions k read in dwells j at mid-times t_kj, weights w_kj with

    sum_j w_kj = 1    and    sum_j w_kj <t^p>_kj  equal for all ions,  p = 1 ... degree

make the ratio of weighted intensities exact for any drift common to all ions that is a polynomial of
that degree. <t^p> is the mean of t^p over the dwell (t^2 + T^2/12 for p = 2), so that unequal dwells
do not leave the drift's curvature behind. Among all solutions the one with least variance is taken,
sum_k v_k sum_j w_kj^2, by Lagrange's multipliers: w = V A' (A V A')^-1 c with V = diag(1/v). Equal v
give the minimum-norm weights (idea of interpolation in cyclic data collection: M. H. Dodson,
J. Phys. E 11 (1978) 296, from memory).

Weights are made once a group of cycles and groups do not overlap, so that no reading is used twice
and the scatter of groups measures what it should.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from controller.reduce.deadtime import Array


def moments(mid: Array, span: Array, degree: int) -> Array:
    """Means of t^p over dwells, p = 1 ... degree, as rows; ``mid`` and ``span`` in one unit of time."""
    rows = []
    low, high = mid - span / 2, mid + span / 2
    for power in range(1, degree + 1):
        # where the span is zero the mean is the value itself
        with np.errstate(divide="ignore", invalid="ignore"):
            mean = (high ** (power + 1) - low ** (power + 1)) / ((power + 1) * span)
        rows.append(np.where(span > 0, mean, mid**power))
    return np.array(rows).reshape(degree, len(mid))


def interpolation_weights(
    mids: Sequence[Array], spans: Sequence[Array], degree: int, variances: Sequence[float] | None = None
) -> list[Array] | None:
    """Weights of each ion's dwells; None where the dwells cannot meet the conditions.

    ``mids`` and ``spans``: one array an ion, any one unit of time. ``variances``: relative variance
    of one dwell of each ion with its weight in the result; equal when left out.
    """
    ions = len(mids)
    counts = [len(mid) for mid in mids]
    ends = np.cumsum(counts)
    everything = np.concatenate(mids)
    centre, half = 0.5 * (everything.min() + everything.max()), 0.5 * np.ptp(everything)
    scale = half if half > 0 else 1.0  # times of order one keep the equations well conditioned
    A = np.zeros((ions + (ions - 1) * degree, int(ends[-1])))
    c = np.zeros(len(A))
    c[:ions] = 1.0
    for ion in range(ions):
        own = slice(int(ends[ion]) - counts[ion], int(ends[ion]))
        A[ion, own] = 1.0
        m = moments((mids[ion] - centre) / scale, spans[ion] / scale, degree)
        if ion == 0:  # the first ion stands on the other side of every moment equation
            A[ions:, own] = -np.tile(m, (ions - 1, 1))
        else:
            A[ions + (ion - 1) * degree : ions + ion * degree, own] = m
    v = np.repeat(np.ones(ions) if variances is None else np.asarray(variances), counts)
    VAt = A.T / v[:, None]
    normal = A @ VAt
    try:
        w = VAt @ np.linalg.solve(normal, c)
    except np.linalg.LinAlgError:
        return None
    if not np.allclose(A @ w, c, atol=1e-9):
        return None
    return np.split(w, ends[:-1])


def group_of(cycle: int, cycles_per_block: int, cycles_per_group: int) -> int:
    """The group of a cycle inside its block; a remainder too short for a group joins the last one."""
    return min(cycle // cycles_per_group, max(cycles_per_block // cycles_per_group, 1) - 1)
