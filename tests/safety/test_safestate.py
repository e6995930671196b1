"""What counts as proof that an output is off. The decay is the textbook exponential of a capacitor
through its bleeder."""

from __future__ import annotations

from math import exp

import pytest
from test_guard import ENVELOPE

from controller.safety.safestate import STEPS, deadline_seconds, implausible, settled
from controller.safety.values import ACCELERATING

NS = 1_000_000_000
LIMITS = ENVELOPE.outputs[ACCELERATING]._replace(safe=50.0, decay_seconds=10.0, maximum=10_000.0)


def decay(volts: float, tau: float, *, every: float = 0.5, seconds: float = 120.0):
    return tuple(
        (round(n * every * NS), volts * exp(-n * every / tau)) for n in range(round(seconds / every))
    )


def test_ten_kilovolts_through_a_ten_second_bleeder_need_53_seconds() -> None:
    """10 nF through 1 gigaohm: ln(200) time constants to 50 V."""
    samples = decay(10_000.0, 10.0)
    first_safe = next(at for at, volts in samples if volts <= 50.0) / NS
    assert first_safe == pytest.approx(53.0, abs=0.5)
    assert deadline_seconds(LIMITS) > first_safe


def test_settled_needs_three_samples_in_a_row() -> None:
    below, above = (0, 10.0), (0, 60.0)
    assert not settled(LIMITS, ())
    assert not settled(LIMITS, (below, below))
    assert settled(LIMITS, (above, below, below, below))
    assert not settled(LIMITS, (below, below, above))
    assert not settled(LIMITS, (below, below, (0, -60.0)))
    assert settled(LIMITS, ((0, 50.0),) * 3)  # at exactly the limit it is off


@pytest.mark.parametrize("tau", [5.1, 7.0, 10.0, 15.0, 19.9])
def test_a_decay_within_a_factor_of_two_is_plausible(tau: float) -> None:
    assert implausible(LIMITS, decay(8000.0, tau)) == ""


@pytest.mark.parametrize(
    ("tau", "word"),
    [(4.9, "sensor"), (1.0, "sensor"), (0.01, "sensor"), (20.1, "bleeder"), (60.0, "bleeder")],
)
def test_faster_or_slower_is_not(tau: float, word: str) -> None:
    assert word in implausible(LIMITS, decay(8000.0, tau))


def test_where_no_decay_was_observable_none_is_judged() -> None:
    assert implausible(LIMITS, ()) == ""
    assert implausible(LIMITS, decay(190.0, 0.01)) == ""
    assert implausible(LIMITS, ((0, 8000.0),)) == ""


def test_the_procedure_says_what_follows_from_every_step() -> None:
    assert [step.name for step in STEPS][:3] == ["latch", "stop ions", "fire all"]
    assert all(step.confirm and step.otherwise for step in STEPS)
