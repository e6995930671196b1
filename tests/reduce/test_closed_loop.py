"""Data drawn from known ratios come back without bias and with honest uncertainties.

The inputs that the instrument file states with an uncertainty (dead time, isobar ratio, electrometer
yield) are drawn from it in every trial, as nature would. Limits: |mean pull| < 3 standard errors,
width of the pulls 0.9 to 1.1 (issue's own figures; a pull with 19 degrees of freedom has width 1.06).
"""

from __future__ import annotations

import math

import numpy as np
from reduce_samples import MASSES, bench, sequence
from synthetic import Plan, Stop, rows

from controller.reduce.pipeline import reduce_rows

TRIALS = 320


def _fractionate(ion: str, beta: float) -> float:
    return (MASSES[ion] / MASSES["88Sr+"]) ** -beta


def _judge(pulls: list[float]) -> None:
    found = np.array(pulls)
    assert abs(found.mean()) < 3 * found.std(ddof=1) / math.sqrt(len(found))
    assert 0.9 < found.std(ddof=1) < 1.1


def test_strontium_with_everything_wrong_at_once():
    truth = {"87Sr+/86Sr+": 0.71034, "84Sr+/86Sr+": 0.0565}
    pure = {"84Sr+": 0.0565, "86Sr+": 1.0, "87Sr+": 0.71034, "88Sr+": 1 / 0.1194}
    settings = sequence(
        ions={"84Sr+": 2.0, "85Rb+": 1.0, "86Sr+": 2.0, "87Sr+": 3.0, "88Sr+": 1.0},
        ratios=[("87Sr+", "86Sr+"), ("84Sr+", "86Sr+")],
        blocks=4,
        cycles=15,
        interferences=[
            {"on": "87Sr+", "interfering": "87Rb+", "monitor": "85Rb+", "ratio": 0.3856, "u": 0.02}
        ],
        normalisation={"numerator": "86Sr+", "denominator": "88Sr+", "value": 0.1194},
        reduction={"cycles_per_group": 3, "drift_degree": 1, "background": "linear"},
    )
    instrument = bench(u_dead=1e-9, dark=0.3)
    rng = np.random.default_rng(11)
    pulls: dict[str, list[float]] = {name: [] for name in truth}
    for _ in range(TRIALS):
        beta = rng.normal(-1.8, 0.3)
        wander = rng.normal(0.0, 2e-4)  # of beta, per second
        rubidium, isobar = 800.0, rng.normal(0.3856, 0.02)

        def rate(ion: str, b=beta, w=wander, rb=rubidium, r=isobar):
            if ion == "85Rb+":
                return lambda t: rb * _fractionate(ion, b + w * t)
            extra = r * rb if ion == "87Sr+" else 0.0
            at = MASSES["87Rb+"] / MASSES["88Sr+"]
            return lambda t: 7e4 * pure[ion] * _fractionate(ion, b + w * t) + extra * at ** -(b + w * t)

        def tail(mass: float) -> float:
            return 0.3 + 4.0 * (mass - 80.0)

        stops = [
            Stop(ion, rate(ion), dwell, MASSES[ion], tail(MASSES[ion]))
            for ion, dwell in (("84Sr+", 2.0), ("85Rb+", 1.0), ("86Sr+", 2.0), ("87Sr+", 3.0), ("88Sr+", 1.0))
        ]
        stops += [
            Stop(name, 0.0, 1.0, mass, tail(mass), kind="background")
            for name, mass in (("below", 83.5), ("middle", 85.5), ("above", 88.5))
        ]
        plan = Plan(
            stops, blocks=4, cycles=15, dead=rng.normal(20e-9, 1e-9), drift=rng.normal(0, 0.1),
            curve=rng.normal(0, 0.1), flicker=0.002, flicker_time=30.0,
        )  # fmt: skip
        for result in reduce_rows(rows(plan, rng), settings, instrument, MASSES).results:
            pulls[result.name].append((result.value - truth[result.name]) / result.u)
    for name in truth:
        _judge(pulls[name])


def test_a_ratio_across_two_detectors_carries_the_yield():
    settings = sequence(
        ions={"206Pb+": 2.0, "208Pb+": 2.0},
        ratios=[("206Pb+", "208Pb+")],
        blocks=5,
        cycles=12,
        electrometer=("208Pb+",),
        reduction={"cycles_per_group": 3, "background": "linear"},
    )
    instrument = bench(gain=0.98, u_gain=5e-4)
    rng = np.random.default_rng(12)
    pulls = []
    for _ in range(TRIALS):
        stops = [
            Stop("206Pb+", 2e5, 2.0, MASSES["206Pb+"]),
            Stop("208Pb+", 2e7, 2.0, MASSES["208Pb+"], detector="electrometer"),
            Stop("baseline", 0.0, 2.0, 207.5, 3000.0, kind="background", detector="electrometer"),
        ]
        stops[1] = Stop("208Pb+", 2e7, 2.0, MASSES["208Pb+"], 3000.0, detector="electrometer")
        plan = Plan(stops, blocks=5, cycles=12, dead=20e-9, gain=rng.normal(0.98, 5e-4), drift=-0.2)
        (result,) = reduce_rows(rows(plan, rng), settings, instrument, MASSES).results
        pulls.append((result.value - 0.01) / result.u)
    _judge(pulls)
    assert result.components["electrometer gain"] > 0.3 * result.u


def test_few_counts_stay_unbiased():
    """Some 3 counts a dwell: mean of ratios would fail, ratio of sums must not."""
    settings = sequence(
        ions={"206Pb+": 1.0, "208Pb+": 1.0}, ratios=[("206Pb+", "208Pb+")], blocks=6, cycles=15
    )
    rng = np.random.default_rng(13)
    pulls = []
    stops = [Stop("206Pb+", 3.0, 1.0, MASSES["206Pb+"]), Stop("208Pb+", 6.0, 1.0, MASSES["208Pb+"])]
    for _ in range(TRIALS):
        plan = Plan(stops, blocks=6, cycles=15)
        (result,) = reduce_rows(rows(plan, rng), settings, bench(dead=0.0), MASSES).results
        pulls.append((result.value - 0.5) / result.u)
    _judge(pulls)
