"""What a reduction hands back."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import NamedTuple

from controller.record.store import ResultRow
from controller.reduce.observations import MarkedDwell


class GroupPoint(NamedTuple):
    """One group of cycles, for plots: the ratio it alone would give (to first order)."""

    block: int
    group: int
    mid_seconds: float  # from the first gate of the run
    value: float
    u_counting: float
    cycles: int


@dataclass(frozen=True, slots=True)
class RatioResult:
    """One ratio. NaN value and u only with a note that says why; None where a figure is undefined."""

    name: str
    value: float
    u: float
    expanded: float  # half width of the 95 % interval
    coverage: float
    dof: float  # effective, Welch-Satterthwaite
    u_statistical: float
    components: Mapping[str, float]  # systematic parts of u, in units of the ratio
    groups: int
    cycles_used: int
    cycles_marked: int
    chi2: float | None  # reduced, against counting statistics
    autocorrelation: float | None
    floor_ratio: float | None  # u_statistical over the counting-limited floor
    exponent: float | None  # of the mass bias law; None where none was applied
    notes: tuple[str, ...]
    series: tuple[GroupPoint, ...]

    def as_json(self) -> dict[str, object]:
        """Plain data for a script; no NaN, which JSON has not."""

        def plain(number: float | None) -> float | None:
            return number if number is not None and math.isfinite(number) else None

        return {
            "name": self.name,
            "value": plain(self.value),
            "u": plain(self.u),
            "expanded_95": plain(self.expanded),
            "coverage": plain(self.coverage),
            "dof": plain(self.dof),
            "u_statistical": plain(self.u_statistical),
            "components": dict(self.components),
            "groups": self.groups,
            "cycles_used": self.cycles_used,
            "cycles_marked": self.cycles_marked,
            "chi2": plain(self.chi2),
            "autocorrelation": plain(self.autocorrelation),
            "floor_ratio": plain(self.floor_ratio),
            "exponent": plain(self.exponent),
            "notes": list(self.notes),
        }


@dataclass(frozen=True, slots=True)
class Reduction:
    """All ratios of a run with their joint covariance (NaN rows where a ratio is undefined)."""

    results: tuple[RatioResult, ...]
    covariance: tuple[tuple[float, ...], ...]
    marked: tuple[MarkedDwell, ...]  # dwells kept in the record and not used
    intensities: Mapping[str, float]  # mean net rate of each ion, 1/s, all usable dwells
    notes: tuple[str, ...]

    def correlation(self, first: int, second: int) -> float | None:
        """Correlation coefficient of two results; None where one is undefined or exact."""
        product = self.covariance[first][first] * self.covariance[second][second]
        if not product > 0:
            return None
        return self.covariance[first][second] / math.sqrt(product)

    def rows(self) -> list[ResultRow]:
        """The results as they go into the record."""
        names = [result.name for result in self.results]
        found = []
        for number, result in enumerate(self.results):
            with_others = {name: self.correlation(number, other) for other, name in enumerate(names)}
            found.append(
                ResultRow(
                    name=result.name,
                    value=result.value,
                    u=result.u,
                    expanded=result.expanded,
                    coverage=result.coverage,
                    dof=result.dof,
                    u_statistical=result.u_statistical,
                    components=json.dumps(dict(result.components)),
                    correlation=json.dumps(with_others),
                    groups=result.groups,
                    cycles_used=result.cycles_used,
                    cycles_marked=result.cycles_marked,
                    chi2=result.chi2,
                    autocorrelation=result.autocorrelation,
                    floor_ratio=result.floor_ratio,
                    notes=" ".join(result.notes),
                )
            )
        return found
