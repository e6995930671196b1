"""The only reader of time.

``Clock`` is what every other module asks. In a rehearsal the event loop itself is virtual: it jumps
to the next deadline when nothing is ready, so that the product runs unchanged and hours pass in
seconds. Virtual time starts at zero and counts up (a loop clock as large as a Unix time stamp would
livelock: one float step is then coarser than the loop's clock resolution).
"""

from __future__ import annotations

import asyncio
import selectors
import time
from collections.abc import Callable
from datetime import UTC, datetime, timedelta
from functools import partial
from typing import Any, NoReturn

NS = 1_000_000_000


class NothingScheduled(RuntimeError):
    """A virtual loop with nothing ready and no timer would wait for ever: a defect, said at once."""


class _JumpingSelector(selectors.SelectSelector):
    """Never sleeps: adds the wait to the loop's clock instead."""

    def __init__(self) -> None:
        super().__init__()
        self.jump: Callable[[float], None] | None = None

    def select(self, timeout: float | None = None) -> list[tuple[selectors.SelectorKey, int]]:
        if timeout == 0:
            return []
        if timeout is None:
            raise NothingScheduled("nothing is ready and no timer is set: the program is deadlocked")
        assert self.jump is not None
        self.jump(timeout)
        return []


class VirtualLoop(asyncio.SelectorEventLoop):
    """An event loop whose time is a counter. It refuses threads: they would run in real time."""

    def __init__(self) -> None:
        selector = _JumpingSelector()
        super().__init__(selector)
        self._virtual_now = 0.0
        selector.jump = self._jump

    def time(self) -> float:
        return self._virtual_now

    def _jump(self, seconds: float) -> None:
        # The loop computed `seconds` as deadline - now; a deadline that floats just short of itself
        # would be waited for again with a zero-length jump, so step at least one resolution.
        if seconds > 0:
            self._virtual_now += max(seconds, 1e-9)

    def skip_to(self, when: float) -> bool:
        """Jump to ``when`` at once if that is what the loop would do next: nothing else is ready, and no
        timer is due before or with it. Saves a periodic callback the loop's own turn."""
        scheduled = self._scheduled  # type: ignore[attr-defined]
        if self._ready or (scheduled and scheduled[0].when() <= when):  # type: ignore[attr-defined]
            return False
        self._virtual_now = when
        return True

    def run_in_executor(  # type: ignore[override]
        self, executor: Any, func: Any, *args: Any
    ) -> NoReturn:
        raise RuntimeError("no threads in virtual time")


def _wake(future: asyncio.Future[None]) -> None:
    if not future.done():
        future.set_result(None)


class Clock:
    """Monotonic integer nanoseconds, and wall time derived from them.

    ``mono_ns`` never steps. ``wall`` in a rehearsal is a fixed start plus the virtual time, so that
    two equal rehearsals make equal records.
    """

    def __init__(self, *, virtual: bool, wall_start: datetime | None = None) -> None:
        self.virtual = virtual
        self._loop = asyncio.get_running_loop()
        # read many times a tick: in virtual time an attribute of the loop, fetched without a call of ours
        self._time: Callable[[], float] = (
            partial(getattr, self._loop, "_virtual_now") if virtual else self._loop.time
        )
        self._last_time, self._last_ns = -1.0, 0
        self._zero = 0.0 if virtual else self._loop.time()
        self._wall_start = wall_start or datetime.now(UTC)
        # seconds of the same clock, for the simulated plant
        self.seconds: Callable[[], float] = self._time if virtual else self._elapsed

    def mono_ns(self) -> int:
        """Nanoseconds since the clock was made."""
        now = self._time()
        if now == self._last_time:  # in virtual time a whole tick happens at one instant
            return self._last_ns
        self._last_time = now
        self._last_ns = answer = round((now - self._zero) * NS)
        return answer

    def _elapsed(self) -> float:
        return self._loop.time() - self._zero

    def wall(self) -> datetime:
        """UTC. Only for people and records, never for a decision."""
        if self.virtual:
            return self._wall_start + timedelta(seconds=self._loop.time())
        return datetime.now(UTC)

    @staticmethod
    def utc(timestamp: float) -> datetime:
        """A Unix time stamp as UTC, for people."""
        return datetime.fromtimestamp(timestamp, UTC)

    async def sleep(self, seconds: float) -> None:
        await asyncio.sleep(seconds)

    def call_at_ns(self, deadline_ns: int, callback: Callable[[], None]) -> asyncio.TimerHandle:
        """Call back at an absolute deadline: what a period needs, at half the cost of a sleeping task."""
        return self._loop.call_at(self._zero + deadline_ns / NS, callback)

    def skip_to_ns(self, deadline_ns: int) -> bool:
        """In virtual time, be at the deadline now if nobody else has anything to do before it."""
        return isinstance(self._loop, VirtualLoop) and self._loop.skip_to(deadline_ns / NS)

    async def sleep_until_ns(self, deadline_ns: int) -> None:
        """Sleep to an absolute deadline, so that periods do not drift."""
        loop = self._loop
        when = self._zero + deadline_ns / NS
        if when <= loop.time():
            await asyncio.sleep(0)
            return
        # what asyncio.sleep does, from an absolute time and at half its cost; a tick is made of it
        future = loop.create_future()
        handle = loop.call_at(when, _wake, future)
        try:
            await future
        finally:
            handle.cancel()


def real_seconds() -> float:
    """Real elapsed time, for progress and timing reports only; a rehearsal's own clock is virtual."""
    return time.perf_counter()
