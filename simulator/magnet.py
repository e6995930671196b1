"""The magnet and its supply: current by segments, field by hysteresis, saturation and eddy lag.

Every command opens a segment that is closed form until the next one: the current moves linearly at the
supply's slew, or exponentially where the compliance binds, and then holds. The eddy modes follow the
current's rate exactly (dx/dt = dI/dt - x/tau), the hysteretic part follows the turning points, so the
field at any time of any remembered segment is one evaluation and needs no time step.
"""

from __future__ import annotations

import bisect
import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from simulator.hysteresis import Hysteresis, JilesAtherton, Preisach, State
from simulator.noise import Wander
from simulator.spec import MagnetSpec

SEGMENTS_KEPT = 600  # a gate looks back over no more set-points than this
REACHABLE = 0.999  # of compliance over resistance: the last part would take for ever
FULL_FIELD_A_PER_M = 5000.0  # input of the Jiles-Atherton set at full current


class Segment(NamedTuple):
    """From ``start``: rate in A/s until ``linear_end``, then exponentially to ``goal``, held from ``end``."""

    start: float
    amps: float
    goal: float
    rate: float
    linear_end: float
    end: float
    asymptote: float
    modes: tuple[float, ...]
    history: State


class Magnet:
    """``amps(t)``, ``tesla(t)`` for any remembered time; ``command`` for the present."""

    def __init__(self, spec: MagnetSpec, rng: np.random.Generator) -> None:
        self.spec = spec
        jitter = spec.shape_spread
        self.law_scale = 1.0 + spec.law_spread * float(rng.standard_normal())
        self.loop_tesla = spec.loop_tesla * (1.0 + jitter * float(rng.uniform(-1, 1)))
        self.eddy_amplitudes = tuple(
            a * (1 + jitter * float(rng.uniform(-1, 1))) for a in spec.eddy_amplitudes
        )
        self.eddy_seconds = tuple(s * (1 + jitter * float(rng.uniform(-1, 1))) for s in spec.eddy_seconds)
        width = spec.loop_amps * (1.0 + jitter * float(rng.uniform(-1, 1)))
        self._model: Hysteresis = (
            Preisach(width)
            if spec.hysteresis == "preisach"
            else JilesAtherton(field_per_input=FULL_FIELD_A_PER_M / spec.amps_max)
        )
        # what was done to the magnet before anybody watched is part of its truth
        past = self._model.start((float(rng.uniform(0.3, 1.0)) * spec.amps_max, 0.0))
        self._noise = Wander(rng, spec.noise, shortest=0.4, longest=30.0)
        self._drift = Wander(rng, spec.drift_per_hour, shortest=900.0, longest=7200.0)
        still = (0.0,) * len(self.eddy_seconds)
        self._segments = [Segment(0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, still, past)]
        self._starts = [0.0]
        self.enabled = False
        self.slew = spec.slew  # A/s; a supply's own limits may lower it
        self._eddy = tuple(zip(self.eddy_amplitudes, (-1.0 / s for s in self.eddy_seconds), strict=True))
        # of the segment that holds: static field, and each mode's amplitude (in A) at its end
        self._held: tuple[Segment, float, tuple[float, ...]] | None = None

    # --- commands --------------------------------------------------------------------------------

    def command(self, t: float, goal: float) -> None:
        """Begin to move to ``goal`` in A at time ``t`` (not before the last command)."""
        spec = self.spec
        # a supply cannot drive more than its compliance through its coil
        goal = min(goal, REACHABLE * spec.compliance / spec.resistance)
        goal = round(goal / spec.resolution) * spec.resolution
        here, modes, history = self._state(t)
        sign = math.copysign(1.0, goal - here)
        rate = sign * self.slew
        # the supply can hold the slew until L dI/dt + R I meets its compliance
        limit = (sign * spec.compliance - spec.inductance * rate) / spec.resistance
        turn = goal if (goal - limit) * sign <= 0 else limit
        if (turn - here) * sign < 0:
            turn = here
        linear_end = t + (abs(turn - here) / self.slew if turn != here else 0.0)
        asymptote = sign * spec.compliance / spec.resistance
        end = linear_end
        if turn != goal:
            lag = spec.inductance / spec.resistance
            end += lag * math.log((asymptote - turn) / (asymptote - goal))
        segment = Segment(
            t, here, goal, rate if turn != here else 0.0, linear_end, end, asymptote, modes, history
        )
        self._segments.append(segment)
        self._starts.append(t)
        if len(self._segments) > SEGMENTS_KEPT:
            del self._segments[: SEGMENTS_KEPT // 2]
            del self._starts[: SEGMENTS_KEPT // 2]

    # --- truth -----------------------------------------------------------------------------------

    def segment(self, t: float) -> Segment:
        last = self._segments[-1]
        if t >= last.start:
            return last
        return self._segments[max(0, bisect.bisect_right(self._starts, t) - 1)]

    def amps(self, t: float) -> float:
        """Current in A."""
        return self._amps_in(self.segment(t), t)

    def moving(self, t: float) -> bool:
        return t < self._segments[-1].end

    def coil_volts(self, t: float) -> float:
        """L dI/dt + R I in V."""
        segment, spec = self.segment(t), self.spec
        amps = self._amps_in(segment, t)
        if t >= segment.end:
            return spec.resistance * amps
        if t < segment.linear_end:
            return spec.resistance * amps + spec.inductance * segment.rate
        return math.copysign(spec.compliance, segment.rate or segment.asymptote)

    def tesla(self, t: float) -> float:
        """Field in the gap in T."""
        segment = self.segment(t)
        lag = 0.0
        if t >= segment.end:
            held = self._held
            if held is None or held[0] is not segment:
                held = self._held = self._hold(segment)
            static, age = held[1], t - segment.end
            for (_, rate), x in zip(self._eddy, held[2], strict=True):
                lag += x * math.exp(rate * age)
        else:
            static = self._static(segment, t)
            for amplitude, x in zip(self.eddy_amplitudes, self._modes_in(segment, t), strict=True):
                lag += amplitude * x
        field = static - self.spec.initial_tesla_per_amp * lag
        return field * (1.0 + self._noise(t) + self._drift(t))

    def _hold(self, segment: Segment) -> tuple[Segment, float, tuple[float, ...]]:
        modes = self._modes_in(segment, segment.end)
        return (
            segment,
            self._static(segment, segment.end),
            tuple(a * x for a, x in zip(self.eddy_amplitudes, modes, strict=True)),
        )

    def _static(self, segment: Segment, t: float) -> float:
        """Field without lag."""
        amps = self._amps_in(segment, t)
        spec = self.spec
        history = self._model.advance(segment.history, amps)
        return self.law_scale * spec.saturation * math.tanh(
            spec.initial_tesla_per_amp * amps / spec.saturation
        ) + self.loop_tesla * self._model.output(history)

    def _amps_in(self, segment: Segment, t: float) -> float:
        if t >= segment.end:
            return segment.goal
        if t <= segment.linear_end:
            return segment.amps + segment.rate * (t - segment.start)
        turn = segment.amps + segment.rate * (segment.linear_end - segment.start)
        lag = self.spec.inductance / self.spec.resistance
        return segment.asymptote + (turn - segment.asymptote) * math.exp(-(t - segment.linear_end) / lag)

    def _modes_in(self, segment: Segment, t: float) -> tuple[float, ...]:
        first = min(t, segment.linear_end) - segment.start
        answer = []
        for x0, tau in zip(segment.modes, self.eddy_seconds, strict=True):
            x = x0
            if first > 0:
                steady = segment.rate * tau
                x = steady + (x - steady) * math.exp(-first / tau)
            if t > segment.linear_end:
                x = self._mode_after_linear(segment, t, x, tau)
            answer.append(x)
        return tuple(answer)

    def _mode_after_linear(self, segment: Segment, t: float, x: float, tau: float) -> float:
        curved = min(t, segment.end) - segment.linear_end
        if curved > 0:
            lag = self.spec.inductance / self.spec.resistance
            turn = segment.amps + segment.rate * (segment.linear_end - segment.start)
            drive = (segment.asymptote - turn) / lag
            rates = 1.0 / tau - 1.0 / lag
            ramp = curved if abs(rates) < 1e-9 else (1.0 - math.exp(-rates * curved)) / rates
            x = x * math.exp(-curved / tau) + drive * math.exp(-curved / lag) * ramp
        return x * math.exp(-max(0.0, t - max(segment.end, segment.linear_end)) / tau)

    def _state(self, t: float) -> tuple[float, tuple[float, ...], State]:
        segment = self.segment(t)
        amps = self._amps_in(segment, t)
        return amps, self._modes_in(segment, t), self._model.advance(segment.history, amps)


class Probe:
    """Field probe: a hidden scale error that wanders slowly, and white noise per sample."""

    def __init__(self, spec: MagnetSpec, rng: np.random.Generator) -> None:
        self.scale = spec.probe_scale_spread * float(rng.standard_normal())
        self._wander = Wander(rng, 0.05 * spec.probe_scale_spread, shortest=1200.0, longest=7200.0)
        self.noise = spec.probe_noise

    def reading(self, t: float, tesla: Callable[[float], float], normal: Callable[[], float]) -> float:
        """One sample in T."""
        return tesla(t) * (1.0 + self.scale + self._wander(t)) + self.noise * normal()
