"""The whole way from detector rows to ratios with a joint uncertainty (pure: no I/O, no clock).

Order of the steps, each on the result of the one before:

    gates -> dead time, volts to ions, detector yield     (rates.py, deadtime.py)
          -> background in m/z, block by block            (background.py)
          -> interpolation against drift, group by group  (groups.py, drift.py)
          -> mean intensities -> isobars and mass bias -> ratios   (ratios.py, interference.py, massbias.py)
          -> scatter of groups                            (scatter.py, statistics.py)
          -> each input quantity shifted by +-u, all of the above done again   (uncertainty.py)

A block's background is shared by its groups. The scatter of m groups a block sees only 1/m of the
variance that this brings to the mean, so the counting uncertainty of each background position enters
as a component of its own with the rest, a factor sqrt(1 - 1/m).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping

import numpy as np

from controller.config.instrument import Instrument
from controller.config.sequence import Sequence
from controller.record.journal import DetectorRow
from controller.reduce import background, uncertainty
from controller.reduce.deadtime import Array
from controller.reduce.groups import Cycles, Groups, align, make_groups
from controller.reduce.observations import MarkedDwell, Observations, barred, collect
from controller.reduce.rates import dwell_rates
from controller.reduce.ratios import Masses, Ratio, evaluate, isobar_input, plan_ratios, sensitivities
from controller.reduce.result import RatioResult, Reduction
from controller.reduce.scatter import Scatter, Track, scatter, statistical_covariance

BACKGROUND_COUNTING = "background counting"
NEGLIGIBLE = 1e-9  # of u: below this a component is rounding, not an influence
NO_VALUE = "No net signal in a denominator or in the normalising ratio: no value."


def reduce_rows(
    rows: Iterable[DetectorRow], sequence: Sequence, instrument: Instrument, ions: Masses
) -> Reduction:
    """Ratios of a run. ``ions`` gives the neutral mass in u of any label of the sequence.

    Never raises for want of data: a run with too few gives results that say so in their notes.
    """
    return _Reducer(collect(rows), sequence, instrument, ions).reduction()


class _Reducer:
    """Holds what stays the same while inputs are shifted: data, chosen cycles, weights."""

    def __init__(self, seen: Observations, sequence: Sequence, instrument: Instrument, ions: Masses) -> None:
        self.seen, self.sequence, self.instrument, self.ions = seen, sequence, instrument, ions
        self.values, self.u = _inputs(sequence, instrument)
        rates, variances = self._rates(self.values)
        self.possible = np.isfinite(rates)
        self.usable = self.possible & ~np.array([barred(marks) for marks in seen.marks], dtype=bool)
        for position in background.positions(seen, rates, variances, self.usable):
            name = f"{BACKGROUND_COUNTING} {position.stop.label}"
            self.values[name], self.u[name] = 0.0, position.u
        self.net, self.variances, self.under_notes = self._net(self.values)
        self.tracks = [self._track(ratio) for ratio in plan_ratios(sequence, ions, self.values)]

    def reduction(self) -> Reduction:
        found = [scatter(track, self.seen, self.net, self.variances) for track in self.tracks]
        systematic = uncertainty.contributions(self._all_values, self.values, self.u)
        for name in systematic:
            if name.startswith(BACKGROUND_COUNTING):
                systematic[name] = systematic[name] * [_unseen_share(track.groups) for track in self.tracks]
        results = [
            _result(track, seen, {name: float(signed[number]) for name, signed in systematic.items()})
            for number, (track, seen) in enumerate(zip(self.tracks, found, strict=True))
        ]
        joint = uncertainty.covariance(statistical_covariance(self.tracks, found), systematic)
        return Reduction(
            results=tuple(results),
            covariance=tuple(tuple(row) for row in joint.tolist()),
            marked=self._marked(),
            intensities=self._intensities(),
            notes=self._notes(),
        )

    # --- steps that are repeated with shifted inputs ---------------------------------------------

    def _rates(self, values: Mapping[str, float]) -> tuple[Array, Array]:
        return dwell_rates(
            self.seen,
            self.instrument.counter,
            self.instrument.electrometer,
            dead_seconds=values["dead time"],
            gain=values["electrometer gain"],
        )

    def _net(self, values: Mapping[str, float]) -> tuple[Array, Array, dict[str, str]]:
        """Rates less background a dwell, their counting variances, notes by ion."""
        seen, mode = self.seen, self.sequence.reduction.background
        rates, variances = self._rates(values)
        found = []
        for position in background.positions(seen, rates, variances, self.usable):
            shift = values.get(f"{BACKGROUND_COUNTING} {position.stop.label}", 0.0)
            found.append(position._replace(blocks=position.blocks + shift, mean=position.mean + shift))
        notes: dict[str, str] = {}
        for code, stop in enumerate(seen.stops):
            if stop.kind != "ion":
                continue
            dark = self.instrument.counter.dark_rate
            under = background.under(stop, found, mode=mode, dark=dark, blocks=seen.blocks)
            tail = (under.blocks - under.dark) * values["background model"]
            own = np.flatnonzero(seen.stop == code)
            rates[own] -= under.dark + tail[seen.block[own]]
            if under.note:
                notes[stop.label] = under.note
        return rates, variances, notes

    def _all_values(self, values: Mapping[str, float]) -> Array:
        """Every ratio under shifted inputs; NaN where undefined."""
        net, _, _ = self._net(values)
        found = []
        for track, ratio in zip(self.tracks, plan_ratios(self.sequence, self.ions, values), strict=True):
            if track.groups is None:
                found.append(math.nan)
                continue
            means = track.groups.means(net).tolist()
            found.append(evaluate(ratio, dict(zip(ratio.members, means, strict=True))).value)
        return np.array(found)

    # --- steps that are done once ----------------------------------------------------------------

    def _track(self, ratio: Ratio) -> Track:
        """Choose cycles, groups and interpolation weights."""
        cycles = align(self.seen, self.usable, ratio.members)
        notes: list[str] = []
        if cycles.incomplete:
            notes.append(f"{cycles.incomplete} incomplete cycles are not used.")
        if not len(cycles.dwells):
            return Track(ratio, cycles, None, (*notes, "No complete unmarked cycle: no value."))
        settings, per_block = self.sequence.reduction, self.sequence.run.cycles_per_block
        degree, share = settings.drift_degree, self._variance_shares(ratio, cycles)
        groups = make_groups(
            self.seen,
            cycles,
            share,
            cycles_per_block=per_block,
            cycles_per_group=settings.cycles_per_group,
            degree=degree,
        )
        if not groups.keys:
            degree = min(degree, int(np.bincount(cycles.block).max()) - 1)
            notes.append(f"Few cycles: one group a block, drift taken as a polynomial of degree {degree}.")
            groups = make_groups(
                self.seen,
                cycles,
                share,
                cycles_per_block=per_block,
                cycles_per_group=per_block,
                degree=degree,
            )
        left = len(cycles.dwells) - int(groups.cycles.sum())
        if left:
            notes.append(f"{left} unmarked cycles are not used: too few in their group.")
        return Track(ratio, cycles, groups if groups.keys else None, tuple(notes))

    def _variance_shares(self, ratio: Ratio, cycles: Cycles) -> Array:
        """Share of one dwell of each ion in the ratio's variance, for the interpolation weights."""
        means = self.net[cycles.dwells].mean(axis=0)
        slopes = sensitivities(ratio, dict(zip(ratio.members, means.tolist(), strict=True)))
        return np.asarray(np.nan_to_num(slopes**2 * self.variances[cycles.dwells].mean(axis=0)))

    def _marked(self) -> tuple[MarkedDwell, ...]:
        seen = self.seen
        return tuple(
            MarkedDwell(
                int(seen.block[dwell]),
                int(seen.cycle[dwell]),
                seen.stops[seen.stop[dwell]].label,
                seen.marks[dwell]
                if self.possible[dwell]
                else f"{seen.marks[dwell]} beyond-dead-time".strip(),
            )
            for dwell in np.flatnonzero(~self.usable)
        )

    def _intensities(self) -> dict[str, float]:
        found = {}
        for code, stop in enumerate(self.seen.stops):
            own = np.flatnonzero((self.seen.stop == code) & self.usable)
            if stop.kind == "ion" and len(own):
                found[stop.label] = float(self.net[own].mean())
        return found

    def _notes(self) -> tuple[str, ...]:
        notes = []
        barred_count = int(np.count_nonzero(~self.usable))
        if barred_count:
            notes.append(f"{barred_count} marked dwells are kept in the record and not used.")
        told = sum(1 for marks, good in zip(self.seen.marks, self.usable, strict=True) if marks and good)
        if told:
            notes.append(f"{told} dwells are used although their station kept an older centre.")
        for reason in dict.fromkeys(self.under_notes.values()):
            ions = [ion for ion, why in self.under_notes.items() if why == reason]
            notes.append(f"{', '.join(ions)}: {reason}.")
        if self.sequence.interferences and self.sequence.normalisation is None:
            notes.append("Isobars are subtracted without mass bias: the sequence has no normalisation.")
        return tuple(notes)


def _inputs(sequence: Sequence, instrument: Instrument) -> tuple[dict[str, float], dict[str, float]]:
    """Input quantities by name: values, and standard uncertainties."""
    counter, electrometer = instrument.counter, instrument.electrometer
    values = {
        "dead time": counter.dead_time.value,
        "electrometer gain": electrometer.gain.value,
        "background model": 1.0,
    }
    u = {
        "dead time": counter.dead_time.u,
        "electrometer gain": electrometer.gain.u,
        "background model": sequence.reduction.tail_u,
    }
    for isobar in sequence.interferences:
        name = isobar_input(isobar.on, isobar.interfering)
        values[name], u[name] = isobar.ratio, isobar.u
    if sequence.normalisation is not None:
        values["normalising ratio"] = sequence.normalisation.value
        u["normalising ratio"] = sequence.normalisation.u
    return values, u


def _unseen_share(groups: Groups | None) -> float:
    """Share of a background's counting noise that the scatter of groups does not show."""
    if groups is None or len(groups.keys) == 1:
        return 1.0
    per_block = len(groups.keys) / len({block for block, _ in groups.keys})
    return math.sqrt(1.0 - 1.0 / per_block)


def _result(track: Track, found: Scatter | None, signed: Mapping[str, float]) -> RatioResult:
    nothing, notes = found is None, track.notes
    if found is None:
        notes = notes if track.groups is None else (*notes, NO_VALUE)
        found = Scatter(math.nan, math.nan, np.empty(0), math.nan, math.nan, None, None, None, (), ())
        total = uncertainty.Combined(math.nan, math.nan, math.nan, math.nan)
    else:
        total = uncertainty.combine(found.u, found.dof, list(signed.values()))
        if not math.isfinite(total.u):
            notes = (*notes, "An input shifted by its u allows no value: u is undefined.")
    groups = None if nothing else track.groups
    return RatioResult(
        name=track.ratio.name,
        value=found.value,
        u=total.u,
        expanded=total.expanded,
        coverage=total.coverage,
        dof=total.dof,
        u_statistical=found.u,
        components={name: abs(part) for name, part in signed.items() if abs(part) > NEGLIGIBLE * total.u},
        groups=len(groups.keys) if groups else 0,
        cycles_used=int(groups.cycles.sum()) if groups else 0,
        cycles_marked=track.cycles.marked,
        chi2=found.chi2,
        autocorrelation=found.autocorrelation,
        floor_ratio=found.floor_ratio,
        exponent=found.beta if track.ratio.normalised and not nothing else None,
        notes=(*notes, *found.notes),
        series=found.series,
    )
