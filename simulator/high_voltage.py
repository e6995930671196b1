"""High-voltage supplies: slewing, settling, ripple, bleed-down, arcs; by segments, closed form.

After a slew a supply settles with two exponentials (5 ms with 2 %, 100 ms with 0.1 % of the step). Off,
it falls through its bleeder. What it reports is on the set-point's side of a divider that has a hidden
error: the true volts differ by it, and nobody but the beam can tell.
"""

from __future__ import annotations

import bisect
import math
from typing import NamedTuple

import numpy as np

from simulator.noise import Wander
from simulator.spec import SupplySpec

FAST_SHARE, FAST_SECONDS = 0.02, 0.005
SLOW_SHARE, SLOW_SECONDS = 0.001, 0.1
SEGMENTS_KEPT = 400
FLAT_DECAYS = 40.0  # e^-40 of 10 kV is below any noise
ARC_SECONDS = 0.02


class Segment(NamedTuple):
    """From ``start`` at ``volts`` to ``goal`` by ``slew_end``; ``off`` falls by the bleeder instead."""

    start: float
    volts: float
    goal: float
    slew_end: float
    off: bool


class Supply:
    """``nominal(t)`` is what the supply believes, ``volts(t)`` the truth, in V."""

    def __init__(self, spec: SupplySpec, rng: np.random.Generator) -> None:
        self.spec = spec
        self.divider = spec.divider_spread * float(rng.standard_normal())
        self._ripple = Wander(rng, spec.ripple, shortest=0.2, longest=600.0)
        self._segments = [Segment(0.0, 0.0, 0.0, 0.0, True)]
        self._starts = [0.0]
        # from when the last segment is flat, and at what: most questions are asked of a supply at rest
        self._flat_from, self._flat_volts = 0.0, 0.0
        self.set_point = 0.0
        self.enabled = False
        self.tripped = False
        self.slew = spec.slew  # V/s; a supply's own limits may lower it
        self.deviation = 0.0  # fault: output off by this fraction, now
        self._deviations = [(-math.inf, 0.0)]  # since when, by what: a gate looks back
        self.stuck = False  # fault: acknowledges, does nothing
        self.arc_until = -1.0

    def write(self, t: float, volts: float) -> None:
        self.set_point = volts
        if self.enabled and not self.stuck:
            self._open(t, volts, off=False)

    def enable(self, t: float) -> None:
        if not self.tripped:
            self.enabled = True
            if not self.stuck:
                self._open(t, self.set_point, off=False)

    def disable(self, t: float) -> None:
        """Switch off."""
        self.enabled = False
        if not self.stuck:
            self._open(t, 0.0, off=True)

    def cut(self, t: float) -> None:
        """The hardwired chain's contactor opens: off, whatever the supply's electronics do."""
        self.enabled = False
        if not self._segments[-1].off:
            self._open(t, 0.0, off=True)

    def deviate(self, t: float, fraction: float) -> None:
        """Fault: from now on the output is off by a fraction of itself."""
        self.deviation = fraction
        self._deviations.append((t, fraction))

    def stick(self) -> None:
        """Fault: from now on commands are acknowledged and the output does not follow."""
        self.stuck = True

    def release(self, t: float) -> None:
        """The output follows again, to what it was told while it did not."""
        self.stuck = False
        if self.enabled:
            self._open(t, self.set_point, off=False)
        else:
            self._open(t, 0.0, off=True)

    def arc(self, t: float) -> None:
        """Collapse, over-current, own trip."""
        self.tripped = True
        self.arc_until = t + ARC_SECONDS
        self.enabled = False
        self._append(Segment(t, 0.0, 0.0, t, True))

    def nominal(self, t: float) -> float:
        """The output as the supply's own divider sees it."""
        if t >= self._flat_from:
            return self._flat_volts
        segment = self._segments[-1]
        if t < segment.start:
            segment = self._segments[max(0, bisect.bisect_right(self._starts, t) - 1)]
        return self._in(segment, t)

    def volts(self, t: float) -> float:
        """The true output."""
        deviation = self.deviation if t >= self._deviations[-1][0] else self._deviation_at(t)
        return self.nominal(t) * (1.0 + self.divider + deviation) * (1.0 + self._ripple(t))

    def events_between(self, start: float, end: float) -> list[float]:
        """Times of commands inside an interval: a gate's integral is cut there."""
        low, high = bisect.bisect_right(self._starts, start), bisect.bisect_left(self._starts, end)
        changed = self._starts[low:high]
        if len(self._deviations) > 1:
            changed += [at for at, _ in self._deviations if start < at < end]
        return changed

    def _deviation_at(self, t: float) -> float:
        return next(fraction for at, fraction in reversed(self._deviations) if at <= t)

    def steady(self, start: float, end: float) -> bool:
        """Whether the output stood still, settling apart, throughout an interval."""
        segment = self._segments[-1]
        if segment.start > start:
            return False
        return self._flat_from <= start or not (segment.off or segment.slew_end > start)

    def moving(self, t: float) -> bool:
        return t < self._segments[-1].slew_end

    def _open(self, t: float, goal: float, *, off: bool) -> None:
        here = self.nominal(t)
        slew_end = t if off else t + abs(goal - here) / self.slew
        self._append(Segment(t, here, goal, slew_end, off))

    def _append(self, segment: Segment) -> None:
        self._segments.append(segment)
        self._starts.append(segment.start)
        rest = FLAT_DECAYS * (self.spec.bleed if segment.off else SLOW_SECONDS)
        self._flat_from = segment.slew_end + rest
        self._flat_volts = 0.0 if segment.off else segment.goal
        if len(self._segments) > SEGMENTS_KEPT:
            del self._segments[: SEGMENTS_KEPT // 2]
            del self._starts[: SEGMENTS_KEPT // 2]

    def _in(self, segment: Segment, t: float) -> float:
        if segment.off:
            return segment.volts * math.exp(-(t - segment.start) / self.spec.bleed)
        step = segment.goal - segment.volts
        if t < segment.slew_end:
            share = (t - segment.start) / (segment.slew_end - segment.start)
            return segment.volts + step * (1.0 - FAST_SHARE - SLOW_SHARE) * share
        after = t - segment.slew_end
        lag = FAST_SHARE * math.exp(-after / FAST_SECONDS) + SLOW_SHARE * math.exp(-after / SLOW_SECONDS)
        return segment.goal - step * lag
