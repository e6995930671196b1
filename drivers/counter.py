"""The ion counter."""

from __future__ import annotations

from drivers.gates import GatedDetector
from drivers.polled import Family, Quantity


class Counter(Family):
    """Ratemeter over the last 100 ms, and a gate that counts pulses."""

    quantities = (Quantity("rate", "1/s", 0.0, 1e10),)
    detector_class = GatedDetector
