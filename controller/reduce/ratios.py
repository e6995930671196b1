"""What one ratio needs, and its value from mean intensities.

Intensities are averaged first and divided once (ratio of sums): the mean of N single ratios with
Poisson denominators of mean n is too high by 1/n however many are averaged, the ratio of sums only by
1/(N n). The exponent of the mass bias and the isobars follow from the same averaged intensities. A
mass bias that wanders by d ln R between groups enters the average in second order only, (d ln R)^2/2:
half a ppm for a wander of one per mil.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import NamedTuple

import numpy as np

from controller.config.sequence import Sequence
from controller.reduce.deadtime import Array
from controller.reduce.interference import Isobar, resolve
from controller.reduce.massbias import Normaliser, corrected

Masses = Mapping[str, float] | Callable[[str], float]
STEP = 1e-5  # relative step of numerical derivatives: truncation 1e-10, rounding 1e-11


class Ratio(NamedTuple):
    """A ratio with all that enters it. ``members``: ions whose intensities it needs, itself first."""

    name: str
    numerator: str
    denominator: str
    numerator_mass: float
    denominator_mass: float
    normalised: bool
    members: tuple[str, ...]
    isobars: tuple[Isobar, ...]
    normaliser: Normaliser | None


class Valued(NamedTuple):
    """NaN where the intensities allow no value."""

    value: float
    beta: float


def isobar_input(on: str, interfering: str) -> str:
    """Name of an isobar's true ratio among the input quantities."""
    return f"isobar {interfering} on {on}"


def plan_ratios(sequence: Sequence, masses: Masses, inputs: Mapping[str, float]) -> list[Ratio]:
    """All ratios of the sequence. ``inputs`` holds the present values of known ratios, by name."""

    def mass(label: str) -> float:
        return masses[label] if isinstance(masses, Mapping) else masses(label)

    isobars = [
        Isobar(
            i.on, i.monitor, inputs[isobar_input(i.on, i.interfering)], mass(i.interfering), mass(i.monitor)
        )
        for i in sequence.interferences
    ]
    normaliser = None
    if sequence.normalisation is not None:
        asked = sequence.normalisation
        n, d = asked.numerator, asked.denominator
        normaliser = Normaliser(n, d, inputs["normalising ratio"], mass(n), mass(d))
    planned = []
    for ratio in sequence.ratios:
        n, d = ratio.numerator, ratio.denominator
        normalised = ratio.normalised and normaliser is not None
        members, needed = _members([n, d], isobars, normaliser, normalised)
        law = normaliser if normalised or needed else None
        planned.append(
            Ratio(f"{n}/{d}", n, d, mass(n), mass(d), normalised, tuple(members), tuple(needed), law)
        )
    return planned


def _members(
    ions: list[str], isobars: list[Isobar], normaliser: Normaliser | None, normalised: bool
) -> tuple[list[str], list[Isobar]]:
    """Ions and isobars that enter a ratio of ``ions``, to the end of all chains."""
    members, needed = list(dict.fromkeys(ions)), []
    pending = True
    while pending:
        before = len(members)
        needed = [isobar for isobar in isobars if isobar.on in members]
        wanted = [isobar.monitor for isobar in needed]
        if normaliser is not None and (normalised or needed):
            wanted += [normaliser.numerator, normaliser.denominator]
        members = list(dict.fromkeys(members + wanted))
        pending = len(members) > before
    return members, needed


def evaluate(ratio: Ratio, intensities: Mapping[str, float]) -> Valued:
    """The ratio after isobars and mass bias, from mean net intensities in 1/s."""
    pure, beta, _ = resolve(intensities, ratio.isobars, ratio.normaliser)
    if math.isnan(beta) or not pure[ratio.denominator] > 0:
        return Valued(math.nan, math.nan)
    raw = pure[ratio.numerator] / pure[ratio.denominator]
    if not ratio.normalised:
        return Valued(raw, beta)
    return Valued(corrected(raw, ratio.numerator_mass, ratio.denominator_mass, beta), beta)


def sensitivities(ratio: Ratio, intensities: Mapping[str, float]) -> Array:
    """d value / d intensity of each member, in seconds, by central differences.

    An intensity of zero is stepped by the same share of the largest one.
    """
    largest = max(abs(value) for value in intensities.values())
    found = []
    for ion in ratio.members:
        step = STEP * (abs(intensities[ion]) or largest)
        high = evaluate(ratio, {**intensities, ion: intensities[ion] + step}).value
        low = evaluate(ratio, {**intensities, ion: intensities[ion] - step}).value
        found.append((high - low) / (2 * step))
    return np.array(found)
