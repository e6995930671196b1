"""The electrometer behind the Faraday cup."""

from __future__ import annotations

from drivers.gates import GatedDetector
from drivers.polled import Family, Quantity


class Electrometer(Family):
    """Output volts, and a gate that integrates them."""

    quantities = (Quantity("volts", "V", -1e3, 1e3),)
    detector_class = GatedDetector
