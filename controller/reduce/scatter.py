"""One ratio from its groups: value, each group's influence on it, and what the scatter says.

With D_k = d ratio / d intensity_k at the mean intensities, group g moves the ratio by D . I_g (an
influence function). This is linear, so that a group with few or no counts is as good as any other,
and a drift common to all ions cancels because a ratio has sum D_k I_k = 0.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from controller.reduce import statistics
from controller.reduce.deadtime import Array
from controller.reduce.groups import Cycles, Groups
from controller.reduce.observations import Observations
from controller.reduce.ratios import Ratio, evaluate, sensitivities
from controller.reduce.result import GroupPoint

# With fewer groups their scatter is too uncertain to undercut counting statistics (its own relative
# uncertainty is 1/sqrt(2(n-1)), above a quarter here); the rule is fixed, and a note says when it acts.
GROUPS_MIN = 8


@dataclass(frozen=True, slots=True)
class Track:
    """A ratio with the cycles and groups chosen for it; no groups where nothing can be used."""

    ratio: Ratio
    cycles: Cycles
    groups: Groups | None
    notes: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Scatter:
    """What the groups of one ratio say."""

    value: float
    beta: float
    influence: Array  # of each group on the ratio, mean taken off
    u: float
    dof: float
    chi2: float | None
    autocorrelation: float | None
    floor_ratio: float | None
    series: tuple[GroupPoint, ...]
    notes: tuple[str, ...]


def scatter(track: Track, seen: Observations, net: Array, variances: Array) -> Scatter | None:
    """Statistics of one ratio from net rates a dwell; None where it has no value."""
    ratio, groups = track.ratio, track.groups
    if groups is None:
        return None
    means = groups.means(net)
    named = dict(zip(ratio.members, means.tolist(), strict=True))
    value, beta = evaluate(ratio, named)
    if not math.isfinite(value):
        return None
    notes: list[str] = []
    slopes = sensitivities(ratio, named)
    if fixed_by_definition(ratio):
        slopes = np.zeros_like(slopes)
        notes.append("This is the normalising ratio: its value is an input.")
    by_group = groups.intensities(net)
    counting = slopes**2 @ groups.variances(variances)
    influence = slopes @ by_group
    away = influence - np.average(influence, weights=groups.cycles)
    relative = _relative_intensity(slopes, means, by_group)
    series = value + away / relative
    rho = statistics.autocorrelation(series)
    u, dof = _u(away, groups.cycles, counting, rho, notes)
    u = math.hypot(u, _uncounted(track, seen, variances, slopes, notes))
    floor = math.sqrt(float(slopes**2 @ variances[groups.dwells].sum(axis=0))) / len(groups.dwells)
    return Scatter(
        value=value,
        beta=beta,
        influence=away,
        u=u,
        dof=dof,
        chi2=statistics.reduced_chi2(away, counting, groups.cycles),
        autocorrelation=rho,
        floor_ratio=u / floor if floor > 0 else None,
        series=_points(groups, series, np.sqrt(counting) / relative),
        notes=tuple(notes),
    )


def fixed_by_definition(ratio: Ratio) -> bool:
    """Whether normalisation makes the ratio equal to its own input."""
    law = ratio.normaliser
    return (
        ratio.normalised
        and law is not None
        and {ratio.numerator, ratio.denominator} == {law.numerator, law.denominator}
    )


def _u(
    away: Array, weights: Array, counting: Array, rho: float | None, notes: list[str]
) -> tuple[float, float]:
    if len(away) == 1:
        notes.append("One group only: u is that of counting statistics, not of an observed scatter.")
        return math.sqrt(float(counting[0])), math.inf
    factor = statistics.inflation(rho, len(away))
    if factor > 1:
        notes.append(f"Groups are correlated: standard error multiplied by {factor:.2f}.")
    observed = factor * statistics.weighted_mean_error(away, weights)
    counted = math.sqrt(float(weights**2 @ counting)) / float(weights.sum())
    if len(away) < GROUPS_MIN and observed < counted:
        # so few groups agree better than counting allows by luck alone, and often
        notes.append(
            f"Only {len(away)} groups, and they scatter less than counting statistics: "
            "u is that of counting statistics."
        )
        return counted, math.inf
    return observed, len(away) - 1.0


def _uncounted(track: Track, seen: Observations, variances: Array, slopes: Array, notes: list[str]) -> float:
    """Uncertainty where an ion was never counted: that of one count, since none scatters not at all."""
    assert track.groups is not None
    parts = []
    for member, ion in enumerate(track.ratio.members):
        dwells = track.groups.dwells[:, member]
        if not np.any(variances[dwells] > 0):
            parts.append(float(slopes[member]) / float(seen.live[dwells].sum()))
            notes.append(f"No count of {ion} at all: its u is that of one count.")
    return math.hypot(*parts)


def _relative_intensity(slopes: Array, means: Array, by_group: Array) -> Array:
    """Intensity of each group over the run's mean, ions weighted as the ratio weighs them."""
    shares = np.abs(slopes) * np.sign(means)
    whole = float(shares @ means)
    if not whole > 0:
        return np.ones(by_group.shape[1])
    relative = shares @ by_group / whole
    return np.where(relative > 0, relative, 1.0)


def _points(groups: Groups, series: Array, u: Array) -> tuple[GroupPoint, ...]:
    columns = (groups.mid.tolist(), series.tolist(), u.tolist(), groups.cycles.tolist())
    return tuple(
        GroupPoint(*key, mid, value, error, int(cycles))
        for key, mid, value, error, cycles in zip(groups.keys, *columns, strict=True)
    )


def statistical_covariance(tracks: list[Track], found: list[Scatter | None]) -> Array:
    """Covariance of the ratios from the groups that they share; NaN for ratios without a value."""
    count = len(tracks)
    joint = np.full((count, count), np.nan)
    for i in range(count):
        for j in range(i + 1):
            one, other = found[i], found[j]
            if one is not None and other is not None:
                joint[i, j] = joint[j, i] = one.u**2 if i == j else _shared(tracks, i, j, one, other)
    return joint


def _shared(tracks: list[Track], i: int, j: int, one: Scatter, other: Scatter) -> float:
    """Covariance as correlation of the shared groups times both u; 0 where too few are shared."""
    first, second = tracks[i].groups, tracks[j].groups
    assert first is not None
    assert second is not None
    place = {key: index for index, key in enumerate(second.keys)}
    pairs = [(index, place[key]) for index, key in enumerate(first.keys) if key in place]
    if len(pairs) < 3:
        return 0.0
    left = one.influence[[a for a, _ in pairs]]
    right = other.influence[[b for _, b in pairs]]
    power = float(left @ left) * float(right @ right)
    return float(left @ right) / math.sqrt(power) * one.u * other.u if power > 0 else 0.0
