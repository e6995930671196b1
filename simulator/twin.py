"""What all devices' twins share: a sequence, a link that can fail, a device-side watchdog.

Written from docs/telegrams.md and from nothing of the drivers. A twin is worse than its driver hopes:
it may not answer, answer with garbage, freeze, refuse, or acknowledge and do nothing.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np

from simulator.noise import Normals
from simulator.plant import Plant

ENABLED, REMOTE, TRIPPED, MOVING, GATE = 1, 2, 4, 8, 16
DONE, UNKNOWN, OUTSIDE, LOCAL, HAS_TRIPPED, NOT_READY = 0, 1, 2, 3, 4, 5

Answer = tuple[float, ...] | None


class Twin:
    """One device as its link sees it."""

    def __init__(self, role: str, plant: Plant, now: Callable[[], float], rng: np.random.Generator) -> None:
        self.role, self.plant, self.now = role, plant, now
        self.normal = Normals(rng)
        self._rng = rng
        self.model, self.serial = plant.spec.identities[role]
        self.sequence = 0
        self.frozen: tuple[int, int, tuple[float, ...]] | None = None
        self.garbled = False
        self.silent = False
        self._loss = plant.spec.late_reply, plant.spec.garbled_reply
        # one flag for all ways of misbehaving: the good path is run many million times
        self.misbehaving = self._loss != (0.0, 0.0)
        self._timeline = plant.timeline

    # --- the link's side -------------------------------------------------------------------------

    def identity(self) -> tuple[str, str, str, str, bool] | None:
        if self.silent:
            return None
        return ("Trackfield", self.model, self.serial, "1.0", True)

    def report(self) -> Any:
        """(sequence, status, values), None for no reply, or something that is no report."""
        t = self.now()
        if t >= self._timeline.next:
            self._timeline.catch_up(t)
        if self.misbehaving:
            return self._misreport(t)
        self.sequence += 1
        return (self.sequence, self.status(t), self.values(t))

    def _misreport(self, t: float) -> Any:
        if self.silent:
            return None
        self.sequence += 1
        if self.frozen is not None:
            return self.frozen
        draw = float(self._rng.random())
        if draw < self._loss[0]:
            return None
        if self.garbled or draw < self._loss[0] + self._loss[1]:
            return self._garbage()
        return (self.sequence, self.status(t), self.values(t))

    def command(self, verb: str, *values: float) -> Answer:
        """(code, values...), or None for no reply."""
        t = self.now()
        if t >= self._timeline.next:
            self._timeline.catch_up(t)
        if self.silent:
            return None
        return self.obey(t, verb, values)

    def misbehave(self, *, frozen: bool = False, garbled: bool = False, silent: bool = False) -> None:
        """Begin (or, with nothing named, end) to repeat the last report, to babble, or to be silent."""
        t = self.now()
        self.frozen = (self.sequence, self.status(t), self.values(t)) if frozen else None
        self.garbled, self.silent = garbled, silent
        self.misbehaving = frozen or garbled or silent or self._loss != (0.0, 0.0)

    def _garbage(self) -> Any:
        choices: tuple[Any, ...] = (
            "#?%",
            (self.sequence, REMOTE, ()),
            (self.sequence, REMOTE, (float("nan"),) * 4),
            (self.sequence,),
            (self.sequence, REMOTE, (1e30, 1e30, 1e30, 1e30)),
        )
        return choices[int(self._rng.integers(len(choices)))]

    # --- the device's side -----------------------------------------------------------------------

    def status(self, t: float) -> int:
        return REMOTE

    def values(self, t: float) -> tuple[float, ...]:
        raise NotImplementedError

    def obey(self, t: float, verb: str, values: tuple[float, ...]) -> Answer:
        return (UNKNOWN,)


class OutputTwin(Twin):
    """A device with a set-point, its own limits, and a watchdog that switches it off when unheard."""

    def __init__(
        self,
        role: str,
        plant: Plant,
        now: Callable[[], float],
        rng: np.random.Generator,
        limits: tuple[float, float],
    ) -> None:
        super().__init__(role, plant, now, rng)
        self.hard_maximum, self.hard_slew = limits
        self.maximum, self.slew = limits
        self.watchdog = 0.0
        self._heard = 0.0
        self._watch_at = math.inf  # when the watchdog looks next

    def report(self) -> Any:
        """As of any twin (written out: it is run at every poll); being asked also feeds the watchdog."""
        t = self.now()
        if t >= self._timeline.next:
            self._timeline.catch_up(t)
        if self.misbehaving:
            if not self.silent:
                self._heard = t
            return self._misreport(t)
        self._heard = t
        self.sequence += 1
        return (self.sequence, self.status(t), self.values(t))

    def command(self, verb: str, *values: float) -> Answer:
        answer = super().command(verb, *values)
        if answer is not None:
            self._heard = self.now()
            self._arm()
        return answer

    def obey(self, t: float, verb: str, values: tuple[float, ...]) -> Answer:
        if verb == "limits":
            return (DONE, self.maximum, self.slew, self.watchdog)
        if verb == "set_limits":
            return self._set_limits(values)
        if verb == "set":
            if len(values) != 1 or not 0.0 <= values[0] <= self.maximum:
                return (OUTSIDE,)
            return self.apply(t, values[0])
        if verb == "enable":
            return self.turn_on(t)
        if verb == "disable":
            self.turn_off(t)
            return (DONE,)
        if verb == "reset":
            return self.clear_trip()
        return (UNKNOWN,)

    def _set_limits(self, values: tuple[float, ...]) -> Answer:
        if len(values) != 3 or not (0 < values[0] <= self.hard_maximum and values[1] > 0 and values[2] >= 0):
            return (OUTSIDE,)
        self.maximum, self.watchdog = values[0], values[2]
        self.slew = min(values[1], self.hard_slew)
        self.hold_slew(self.slew)
        return (DONE,)

    def _arm(self) -> None:
        due = self.now() + self.watchdog
        # earlier than the next look only if none is due, or the watchdog was shortened
        if self.watchdog > 0 and due < self._watch_at and self.is_on():
            self._watch_at = due
            self._timeline.add(due, self._watch)

    def _watch(self, t: float) -> None:
        """Off if nothing has been heard for the watchdog's time; else look again when it would be due."""
        if t != self._watch_at:  # a look that a shorter watchdog has replaced
            return
        self._watch_at = math.inf
        if not self.is_on() or self.watchdog <= 0:
            return
        due = self._heard + self.watchdog
        if t >= due - 1e-9:
            self.plant.log.add(t, f"{self.role} watchdog")
            self.turn_off(t)
        else:
            self._watch_at = due
            self._timeline.add(due, self._watch)

    def apply(self, t: float, value: float) -> Answer:
        raise NotImplementedError

    def hold_slew(self, per_second: float) -> None:
        """Move no faster than this from the next command on."""
        raise NotImplementedError

    def turn_on(self, t: float) -> Answer:
        raise NotImplementedError

    def turn_off(self, t: float) -> None:
        raise NotImplementedError

    def is_on(self) -> bool:
        raise NotImplementedError

    def clear_trip(self) -> Answer:
        return (DONE,)
