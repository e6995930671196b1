"""What the tick and the gateway share: the present snapshot, the latches, and what was reported.

Values of the kernel, replaced whole, and the reports that wait for the next tick. Only one thread ever
touches it.
"""

from __future__ import annotations

from math import isnan, nan
from typing import TypeVar

from controller.safety.values import OUTPUTS, Envelope, Latches, Snapshot
from drivers.contract import Quality, Reading

T = TypeVar("T")

POSTS_MAX = 64  # reports kept for one tick; more say nothing new, so the later ones are dropped


class Board:
    """The present state of the safety layer."""

    __slots__ = ("_posts", "demands", "envelope", "latches", "live", "snapshot")

    def __init__(self, envelope: Envelope) -> None:
        count = len(OUTPUTS)
        self.envelope = envelope
        unknown = (nan,) * count
        readings = tuple(Reading(nan, Quality.ABSENT, -1, name) for name in envelope.channels)
        self.snapshot = Snapshot(-1, 0, readings, unknown, False, ())
        self._posts: list[tuple[str, str, str]] = []
        self.replace(
            Latches(
                first_out=None,
                causes=(),
                started=False,
                proven=(False,) * count,
                enabled=(False,) * count,
                demands=unknown,
                permitted_ns=(-1,) * count,
                held=(-1,) * len(envelope.bounds),
                confirmed=False,
            )
        )

    def replace(self, latches: Latches) -> None:
        """Take new latches."""
        self.latches = latches
        self.demands = latches.demands
        self.live = (
            latches.started
            or True in latches.enabled
            or any(demand != 0 and not isnan(demand) for demand in latches.demands)
        )

    def adopt(self, output: int, *, demand: float, enabled: bool, proven: bool) -> None:
        """Take an output's state as read back from its device, before anything was asked of it."""
        latches = self.latches
        self.replace(
            latches._replace(
                demands=_put(latches.demands, output, demand),
                enabled=_put(latches.enabled, output, enabled),
                proven=_put(latches.proven, output, proven),
            )
        )

    def post(self, row: str, source: str, detail: str) -> None:
        """Report something from outside; the next tick judges it as a cause of ``row``."""
        if len(self._posts) < POSTS_MAX:
            self._posts.append((row, source, detail))

    def take_posts(self) -> tuple[tuple[str, str, str], ...]:
        """What was reported since the last tick."""
        if not self._posts:
            return ()
        posts = tuple(self._posts)
        self._posts.clear()
        return posts


def _put(values: tuple[T, ...], index: int, value: T) -> tuple[T, ...]:
    return (*values[:index], value, *values[index + 1 :])
