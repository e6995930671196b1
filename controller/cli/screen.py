"""What a person sees: banners, findings, progress. Plain lines, no tabs, fit to paste into a message."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterable, Mapping

from controller.run.itinerary import Itinerary, Visit
from drivers.clock import Clock, real_seconds

LINE_EVERY = 10.0  # s of real time between plain progress lines
REDRAW_EVERY = 0.2  # s of real time between redraws on a terminal


class Screen:
    """Prints for people, or one JSON object at the end for scripts; never both."""

    def __init__(self, *, as_json: bool) -> None:
        self.as_json = as_json
        self._open_line = False

    def say(self, text: str = "") -> None:
        """A line for people, on standard output."""
        if not self.as_json:
            self._close_line()
            sys.stdout.write(text + "\n")
            sys.stdout.flush()

    def complain(self, text: str) -> None:
        """A line that must be seen whatever the format, on standard error."""
        self._close_line()
        sys.stderr.write(text + "\n")
        sys.stderr.flush()

    def result(self, data: Mapping[str, object]) -> None:
        """The one JSON object of a ``--json`` command."""
        if self.as_json:
            sys.stdout.write(json.dumps(data, indent=2, sort_keys=True) + "\n")

    def redraw(self, text: str) -> None:
        """Overwrite the open progress line of a terminal."""
        sys.stdout.write("\r" + text[:110].ljust(110))
        sys.stdout.flush()
        self._open_line = True

    def _close_line(self) -> None:
        if self._open_line:
            sys.stdout.write("\n")
            self._open_line = False


def columns(rows: Iterable[tuple[str, ...]]) -> str:
    """Left-aligned columns of plain text, two spaces apart."""
    table = [tuple(row) for row in rows]
    if not table:
        return ""
    widths = [max(len(row[i]) for row in table) for i in range(len(table[0]))]
    lines = ("  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)) for row in table)
    return "\n".join(line.rstrip() for line in lines)


def duration(seconds: float) -> str:
    """Hours, minutes and seconds as a person says them."""
    whole = round(seconds)
    hours, rest = divmod(whole, 3600)
    minutes, secs = divmod(rest, 60)
    if hours:
        return f"{hours} h {minutes:02d} min"
    return f"{minutes} min {secs:02d} s" if minutes else f"{secs} s"


class Progress:
    """Progress of a run with an estimate of its end that is measured, not promised.

    The time left is the visits left times the mean time per visit so far, once a cycle has been read;
    before that, the forecast.
    """

    def __init__(self, screen: Screen, clock: Clock, itinerary: Itinerary, forecast_seconds: float) -> None:
        self._screen, self._clock, self._itinerary = screen, clock, itinerary
        self._forecast = forecast_seconds
        self._first: tuple[int, float] | None = None
        self._shown = 0.0
        self._terminal = sys.stdout.isatty()
        self._real_start = real_seconds()

    def read(self, visit: Visit) -> None:
        """One stop has been read."""
        now = self._clock.seconds()
        if self._first is None:
            self._first = (visit.number, now)
        if self._screen.as_json:
            return
        real = real_seconds()
        last = visit.number + 1 == self._itinerary.total
        if not last and real - self._shown < (REDRAW_EVERY if self._terminal else LINE_EVERY):
            return
        self._shown = real
        text = self.line(visit, now)
        if self._terminal:
            self._screen.redraw(text)
        else:
            self._screen.say(text)

    def seconds_left(self, visit: Visit, now: float) -> float:
        """Time left by the instrument's clock, in s."""
        left = self._itinerary.total - visit.number - 1
        assert self._first is not None
        done = visit.number - self._first[0]
        if done < self._itinerary.stops_per_cycle:
            return self._forecast * left / self._itinerary.total
        return left * (now - self._first[1]) / done

    def line(self, visit: Visit, now: float) -> str:
        itinerary = self._itinerary
        left = self.seconds_left(visit, now)
        speed = ""
        if self._clock.virtual:
            elapsed = max(real_seconds() - self._real_start, 1e-9)
            speed = f"; rehearsing {now / elapsed:,.0f} times faster than real"
        end = self._clock.wall().timestamp() + left
        finish = Clock.utc(end).strftime("%H:%M:%SZ")
        return (
            f"block {visit.block + 1}/{itinerary.blocks} cycle {visit.cycle + 1}/{itinerary.cycles_per_block}"
            f" {visit.station.name} {visit.stop.label}: {100 * (visit.number + 1) / itinerary.total:.0f} %,"
            f" {duration(left)} left, ends {finish}{speed}"
        )


def counted(number: int, noun: str) -> str:
    """``1 station``, ``3 stations``."""
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
