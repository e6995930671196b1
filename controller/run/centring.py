"""Peak centring: where on the voltage axis the beam really passes.

With the field held, the mass on the axis goes as 1/U (a double-focusing train: the ESA sets the
energy), so one factor f on both voltages scans a peak without moving the magnet: U = f U0, V tracked.
The centre f_c of the flat top is the station's calibration: every voltage of the station is multiplied
by it. It absorbs the field probe's scale, the radii and the voltage dividers, and follows their drift.

A second scan moves V alone at fixed U. The peak does not move (first order), but the beam crosses the
energy slit; its centre is the energy trim.

Flanks are found at half the top by straight lines between points. A scan runs up on its even points
and back on its odd points, so that a linear drift of the beam cancels to first order.
"""

from __future__ import annotations

import math
from typing import NamedTuple

from controller.config.instrument import Geometry
from controller.physics.peak import peak_widths

MIN_TOP_COUNTS = 100.0  # below this a flank cannot be told from noise; common practice, no source


class ScanPoint(NamedTuple):
    """One gate of a scan: the factor set, the signal (counts or V s) and its variance."""

    factor: float
    signal: float


class Centre(NamedTuple):
    """What a scan found: the centre as a factor, its standard uncertainty, the width at half height."""

    factor: float
    u: float
    width: float
    top: float


class NoPeak(Exception):
    """The scan shows no peak that can be centred; the message says why."""


def scan_factors(centre: float, half_span: float, points: int) -> list[float]:
    """Factors of one scan in the order of visiting: even points up, odd points back."""
    grid = [centre * (1 + half_span * (2 * i / (points - 1) - 1)) for i in range(points)]
    return grid[0::2] + grid[1::2][::-1]


def coarse_scan(geometry: Geometry, span: float) -> tuple[float, int]:
    """Half span and number of points that cannot step over the flat top (two points on it)."""
    step = 0.4 * peak_widths(geometry).half_height
    return span, 2 * math.ceil(span / step) + 1


def find_centre(points: list[ScanPoint], *, counts_per_signal: float) -> Centre:
    """The middle between the two flanks at half height.

    ``counts_per_signal`` turns the signal into counted ions, for the statistical uncertainty
    u = (edge width) sqrt(N/2) / N per flank, halved in quadrature for the mean of two. Raises NoPeak.
    """
    ordered = sorted(points)
    signals = [point.signal for point in ordered]
    best = max(range(len(signals)), key=signals.__getitem__)
    floor = min(signals)
    top = signals[best] - floor
    counts = top * counts_per_signal
    if counts < MIN_TOP_COUNTS:
        raise NoPeak(f"top of {counts:.0f} ions is below {MIN_TOP_COUNTS:.0f}")
    # the plateau's mean is a better top than its highest point
    plateau = [signal - floor for signal in signals if signal - floor > 0.8 * top]
    half = floor + 0.5 * sum(plateau) / len(plateau)
    left = _crossing(ordered, best, half, -1)
    right = _crossing(ordered, best, half, +1)
    if left is None or right is None:
        side = "low" if left is None else "high"
        raise NoPeak(f"the peak runs out of the scan on its {side} side")
    spacing = (ordered[-1].factor - ordered[0].factor) / (len(ordered) - 1)
    u_flank = 2 * spacing * math.sqrt(0.5 / counts)
    return Centre(
        factor=0.5 * (left + right),
        u=math.hypot(u_flank, u_flank) / 2,
        width=right - left,
        top=sum(plateau) / len(plateau),
    )


def _crossing(ordered: list[ScanPoint], start: int, level: float, direction: int) -> float | None:
    """Where the signal falls through ``level`` walking from ``start``; None where it never does."""
    index = start
    while 0 <= index + direction < len(ordered):
        here, beyond = ordered[index], ordered[index + direction]
        if here.signal >= level > beyond.signal:
            share = (here.signal - level) / (here.signal - beyond.signal)
            return here.factor + share * (beyond.factor - here.factor)
        index += direction
    return None
