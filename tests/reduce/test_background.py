"""Tails between positions: an exponential one is exact log-linear and too high by a straight line."""

from __future__ import annotations

import math

import numpy as np
import pytest

from controller.reduce.background import Position, under
from controller.reduce.observations import Stop

DARK = 0.2


def _position(mass: float, rate: float, *, station: str = "a", detector: str = "counter") -> Position:
    stop = Stop(f"at {mass}", "background", station, detector, mass)
    return Position(stop, np.array([rate, 2 * rate - DARK]), 1.5 * rate - DARK / 2, 0.01)


def _tail(mass: float) -> float:
    """Abundance sensitivity of 3e-6 at one unit from a peak of 1e6 at mass 238, falling by e in 0.8 u."""
    return 3.0 * math.exp(-(238.0 - mass - 1.0) / 0.8)


def _ion(mass: float, detector: str = "counter") -> Stop:
    return Stop("ion", "ion", "a", detector, mass)


def _under(mode, positions, mass=237.0, detector="counter"):
    return under(_ion(mass, detector), positions, mode=mode, dark=DARK, blocks=2)


def test_exponential_tail():
    near = [_position(m, DARK + _tail(m)) for m in (237.5, 236.5)]
    exact = _under("log-linear", near)
    assert exact.blocks - DARK == pytest.approx([_tail(237), 2 * _tail(237)], rel=1e-12)
    # chord over a convex curve, by hand: cosh(0.5/0.8) times too high
    line = _under("linear", near)
    assert (line.blocks[0] - DARK) / _tail(237) == pytest.approx(math.cosh(0.5 / 0.8), rel=1e-12)


def test_nearest_none_and_the_ends():
    near = [_position(m, r) for m, r in ((236.4, 1.0), (237.5, 5.0))]
    assert _under("nearest", near).blocks == pytest.approx([5.0, 9.8])
    assert _under("none", near).blocks == pytest.approx([DARK, DARK])
    assert _under("none", near).note == ""
    for mode in ("linear", "log-linear", "nearest"):  # never extrapolated
        assert _under(mode, near, mass=239.0).blocks[0] == pytest.approx(5.0)
        assert _under(mode, near, mass=230.0).blocks[0] == pytest.approx(1.0)


def test_only_positions_of_the_same_station_and_detector_count():
    others = [_position(237.2, 9.0, station="b"), _position(237.2, 9.0, detector="electrometer")]
    found = _under("linear", others)
    assert found.blocks == pytest.approx([DARK, DARK])
    assert "no background position" in found.note


def test_an_electrometer_has_no_dark_counts():
    near = [_position(236.5, 40.0, detector="electrometer")]
    found = _under("linear", near, detector="electrometer")
    assert found.dark == 0.0
    assert found.blocks[0] == pytest.approx(40.0)


def test_no_tail_above_dark_counts_falls_back_and_says_so():
    near = [_position(236.5, DARK / 2), _position(237.5, 1.0)]
    found = _under("log-linear", near)
    assert found.blocks[0] == pytest.approx((DARK / 2 + 1.0) / 2)
    assert "linear" in found.note
