"""Which cycles a ratio uses, and how they are put into groups that drift cannot reach.

A cycle is used for a ratio when every ion of the ratio has an unmarked dwell in it. Cycles of a block
form groups of fixed places (cycles 0..g-1, g..2g-1, ...), so that a marked cycle moves no border. A
group needs one cycle more than the degree of its drift polynomial; one with fewer is not used.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from controller.reduce.deadtime import Array
from controller.reduce.drift import group_of, interpolation_weights
from controller.reduce.observations import Observations

VARIANCE_FLOOR = 1e-2  # of the largest: keeps a strong ion's weights from running away


@dataclass(frozen=True, slots=True)
class Cycles:
    """The usable cycles of one ratio in order of time: ``dwells[c, k]`` is ion k's dwell in cycle c."""

    dwells: NDArray[np.intp]
    block: NDArray[np.intp]
    cycle: NDArray[np.intp]
    marked: int  # cycles with a marked dwell of one of the ions
    incomplete: int  # cycles that lack a dwell of one of the ions


@dataclass(frozen=True, slots=True)
class Groups:
    """Interpolation weights of one ratio. ``weights`` match ``dwells``; ``group`` one number a cycle."""

    keys: tuple[tuple[int, int], ...]  # (block, group in the block)
    cycles: Array  # number of cycles in each group: its weight
    mid: Array  # s, mean mid-time of each group
    dwells: NDArray[np.intp]
    weights: Array
    group: NDArray[np.intp]

    def intensities(self, rates: Array) -> Array:
        """Interpolated intensity of each ion (row) in each group (column)."""
        return self._sums(rates[self.dwells] * self.weights)

    def variances(self, variances: Array) -> Array:
        """Counting variance of the same."""
        return self._sums(variances[self.dwells] * self.weights**2)

    def means(self, rates: Array) -> Array:
        """Mean intensity of each ion over the run, groups weighted by their cycles."""
        return np.asarray(self.intensities(rates) @ self.cycles / self.cycles.sum())

    def _sums(self, cells: Array) -> Array:
        ions, count = cells.shape[1], len(self.keys)
        return np.array([np.bincount(self.group, cells[:, ion], count) for ion in range(ions)])


def align(seen: Observations, usable: NDArray[np.bool_], members: Sequence[str]) -> Cycles:
    """Find the cycles in which every member ion has a dwell, and which of them are unmarked."""
    column = {
        code: members.index(stop.label)
        for code, stop in enumerate(seen.stops)
        if stop.kind == "ion" and stop.label in members
    }
    rows: dict[tuple[int, int], list[int]] = {}
    for dwell, code in enumerate(seen.stop.tolist()):
        if code in column:
            key = (int(seen.block[dwell]), int(seen.cycle[dwell]))
            rows.setdefault(key, [-1] * len(members))[column[code]] = dwell
    clean, marked, incomplete = [], 0, 0
    for key in sorted(rows):
        if -1 in rows[key]:
            incomplete += 1
        elif not all(usable[dwell] for dwell in rows[key]):
            marked += 1
        else:
            clean.append(key)
    places = np.array(clean, dtype=np.intp).reshape(-1, 2)
    dwells = np.array([rows[key] for key in clean], dtype=np.intp).reshape(-1, len(members))
    return Cycles(dwells, places[:, 0], places[:, 1], marked, incomplete)


def make_groups(
    seen: Observations,
    cycles: Cycles,
    relative_variances: Array,
    *,
    cycles_per_block: int,
    cycles_per_group: int,
    degree: int,
) -> Groups:
    """Groups with their weights; none at all where no group has enough cycles.

    ``relative_variances``: of one dwell of each ion, times its squared share in the ratio.
    """
    largest = float(relative_variances.max())
    v = np.maximum(relative_variances, VARIANCE_FLOOR * largest) if largest > 0 else relative_variances + 1.0
    places: dict[tuple[int, int], list[int]] = {}
    for place, (block, cycle) in enumerate(zip(cycles.block.tolist(), cycles.cycle.tolist(), strict=True)):
        places.setdefault((block, group_of(cycle, cycles_per_block, cycles_per_group)), []).append(place)
    keys, kept, weights = [], [], []
    for key, chosen in places.items():
        if len(chosen) <= degree:
            continue
        dwells = cycles.dwells[chosen]
        found = interpolation_weights(list(seen.mid[dwells].T), list(seen.span[dwells].T), degree, v.tolist())
        if found is None:
            continue
        keys.append(key)
        kept.append(chosen)
        weights.append(np.array(found).T)
    flat = np.array([place for chosen in kept for place in chosen], dtype=np.intp)
    dwells = cycles.dwells[flat]
    group = np.repeat(np.arange(len(keys)), [len(chosen) for chosen in kept])
    count = np.bincount(group, minlength=len(keys)).astype(float)
    mid = np.bincount(group, seen.mid[dwells].mean(axis=1), len(keys)) / count
    stacked = np.concatenate(weights) if weights else np.zeros(dwells.shape)
    return Groups(tuple(keys), count, mid, dwells, stacked, group)
