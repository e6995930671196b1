"""The order of the work: blocks, cycles and stops as one countable line (pure)."""

from __future__ import annotations

from typing import NamedTuple

from controller.route.plan import Route, Station, Stop


class Visit(NamedTuple):
    """One stop in its place. ``number`` counts visits from 0 over the whole run."""

    number: int
    block: int
    cycle: int  # within the block
    station: Station
    stop: Stop


class Itinerary:
    """All visits of a run, by number, without holding them in memory."""

    def __init__(self, route: Route, *, blocks: int, cycles_per_block: int, centre_every: int) -> None:
        self._pass = [(station, stop) for station in route.stations for stop in station.stops]
        self.blocks, self.cycles_per_block = blocks, cycles_per_block
        self._centre_every = centre_every
        self.stops_per_cycle = len(self._pass)
        self.stops_per_block = self.stops_per_cycle * cycles_per_block
        self.total = self.stops_per_block * blocks

    def __getitem__(self, number: int) -> Visit:
        if not 0 <= number < self.total:
            raise IndexError(f"visit {number} of {self.total}")
        block, in_block = divmod(number, self.stops_per_block)
        cycle, in_cycle = divmod(in_block, self.stops_per_cycle)
        station, stop = self._pass[in_cycle]
        return Visit(number, block, cycle, station, stop)

    def centre_before(self, number: int) -> bool:
        """Whether peak centring is due before this visit (block boundaries, after the first)."""
        if number == 0 or number >= self.total or number % self.stops_per_block:
            return False
        return (number // self.stops_per_block) % self._centre_every == 0
