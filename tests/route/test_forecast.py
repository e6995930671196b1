"""Dwells and forecasts against scipy, against the uncertainties package, and against a rehearsal."""

from __future__ import annotations

import math
import sqlite3
from pathlib import Path

import numpy as np
import pytest
from route_samples import CONFIGS, bench, sequence
from scipy.optimize import minimize, minimize_scalar
from uncertainties import ufloat, umath

from controller.cli.commands import invoke
from controller.config.load import load_sequence
from controller.physics.ions import parse_ion
from controller.route.dwell import counting_u, optimal_share
from controller.route.forecast import describe, forecast, log_parts
from controller.route.plan import plan_route


def test_the_optimal_share_is_the_minimum_that_scipy_finds() -> None:
    """Two beams of 1e5 and 1e4 per second in 10 s: against scipy.optimize."""
    share = optimal_share((1.0, -1.0), (1e5, 1e4), (0.0, 0.0), 10.0)
    found = minimize_scalar(
        lambda t: 1 / (1e5 * t) + 1 / (1e4 * (10 - t)),
        bounds=(0.01, 9.99),
        method="bounded",
        options={"xatol": 1e-9},
    )
    assert share.seconds[0] == pytest.approx(float(found.x), rel=1e-5)
    assert share.u_relative == pytest.approx(math.sqrt(float(found.fun)), rel=1e-9)
    assert share.seconds == pytest.approx((2.402531, 7.597469), rel=1e-6)
    assert share.u_relative == pytest.approx(4162.278e-6, rel=1e-6)
    with pytest.raises(ValueError, match="above zero"):
        optimal_share((1.0, -1.0), (1e5, 0.0), (0.0, 0.0), 10.0)


def test_the_counting_floor_of_a_hundred_cycles() -> None:
    """1e5 and 1e4 per second for 1 s and 3 s, 100 cycles: 658.28 ppm by hand."""
    assert counting_u((1, -1), (1e5, 1e4), (1.0, 3.0), 100) == pytest.approx(658.28e-6, rel=1e-5)


def test_a_forecast_adds_up() -> None:
    settings = load_sequence(str(CONFIGS / "strontium" / "sequence.toml")).settings
    instrument = bench()
    route = plan_route(settings, instrument)
    expected = forecast(route, settings, instrument)
    assert expected.dwell_seconds == sum(stop.dwell_seconds for stop in route.stops) == 13.0
    cycles = settings.run.blocks * settings.run.cycles_per_block
    assert expected.expected_counts["88Sr+"] == pytest.approx(5.6e5 * cycles)
    rest = expected.total_seconds - cycles * (expected.dwell_seconds + expected.dead_seconds)
    assert rest == pytest.approx(expected.start_seconds + 4 * expected.centring_seconds)
    assert len(describe(route)) == 1 + len(route.stops)
    assert all(ratio.best_u_relative <= ratio.u_relative * (1 + 1e-12) for ratio in expected.ratios)


@pytest.mark.parametrize("seed", range(6))
def test_the_optimal_share_of_many_peaks_with_backgrounds(seed: int) -> None:
    """Against a general constrained minimiser (scipy, SLSQP) that knows nothing of Lagrange's answer."""
    rng = np.random.default_rng(seed)
    count, total = int(rng.integers(2, 6)), float(rng.uniform(1, 100))
    c = rng.uniform(-2, 2, count)
    n = 10 ** rng.uniform(2, 6, count)
    b = rng.uniform(0, 100, count)

    def variance(t: np.ndarray) -> float:
        return float(np.sum(c**2 * (n + b) / (n**2 * t)))

    share = optimal_share(c.tolist(), n.tolist(), b.tolist(), total)
    start = np.full(count, total / count)
    scale = variance(start)
    found = minimize(
        lambda t: variance(t) / scale,
        start,
        method="SLSQP",
        bounds=[(total * 1e-6, total)] * count,
        constraints={"type": "eq", "fun": lambda t: t.sum() - total},
        options={"ftol": 1e-14, "maxiter": 1000},
    )
    assert sum(share.seconds) == pytest.approx(total)
    assert share.u_relative**2 == pytest.approx(variance(np.array(share.seconds)), rel=1e-12)
    assert variance(np.array(share.seconds)) <= variance(found.x) * (1 + 1e-9)
    assert share.seconds == pytest.approx(found.x, rel=2e-2)


def test_a_normalised_ratio_is_made_of_its_normalising_ions_too() -> None:
    """Against the uncertainties package, which differentiates the exponential law by itself."""
    settings = load_sequence(str(CONFIGS / "strontium" / "sequence.toml")).settings
    made = forecast(plan_route(settings, bench()), settings, bench())
    counts = {label: ufloat(n, math.sqrt(n)) for label, n in made.expected_counts.items()}
    dwells = {item.ion: item.dwell for item in settings.ions}
    mass = {label: parse_ion(label).neutral_u for label in counts}
    rate = {label: n / dwells[label] for label, n in counts.items()}
    beta = umath.log(0.1194 * rate["88Sr+"] / rate["86Sr+"]) / math.log(mass["86Sr+"] / mass["88Sr+"])
    for ratio, top in zip(made.ratios, ("87Sr+", "84Sr+"), strict=True):
        y = rate[top] / rate["86Sr+"] * (mass[top] / mass["86Sr+"]) ** beta
        assert ratio.name == f"{top}/86Sr+"
        assert ratio.u_relative == pytest.approx(y.std_dev / y.nominal_value, rel=1e-9)
        assert sum(ratio.best_seconds) == pytest.approx(sum(dwells[label] for label in ratio.labels))
        assert ratio.best_u_relative < ratio.u_relative


def test_the_shares_of_three_strontium_peaks() -> None:
    """800, 96.5 and 69 thousand per second for 88, 86, 87: 0.0943, 0.2678, 0.6379; 1887.2 ppm in 10 s.

    By hand from the square-root rule; the coefficients add up to nothing, as a rate common to all must.
    """
    settings = load_sequence(str(CONFIGS / "strontium" / "sequence.toml")).settings
    parts = log_parts(settings.ratios[0], settings.normalisation)
    assert sum(parts.values()) == pytest.approx(0.0, abs=1e-12)
    assert parts["86Sr+"] == pytest.approx(-0.496407, abs=1e-6)
    rates = {"88Sr+": 8e5, "86Sr+": 9.65e4, "87Sr+": 6.9e4}
    share = optimal_share([parts[k] for k in rates], list(rates.values()), [0.0] * 3, 10.0)
    assert [t / 10 for t in share.seconds] == pytest.approx([0.0943, 0.2678, 0.6379], abs=5e-5)
    assert 1e6 * share.u_relative == pytest.approx(1887.2, abs=0.05)


def test_a_ratio_that_is_normalised_to_is_not_forecast() -> None:
    """It comes out as the convention, whatever is counted."""
    made = sequence(
        "86Sr+",
        "88Sr+",
        normalisation={"numerator": "86Sr+", "denominator": "88Sr+", "value": 0.1194},
    )
    assert forecast(plan_route(made, bench()), made, bench()).ratios == ()


def test_an_electrometers_resistor_is_waited_for() -> None:
    ions = [{"ion": "87Sr+", "dwell": "1 s"}, {"ion": "88Sr+", "dwell": "1 s", "detector": "electrometer"}]
    counted, slow = sequence("87Sr+", "88Sr+"), sequence("87Sr+", "88Sr+", ions=ions)
    dead = [forecast(plan_route(made, bench()), made, bench()).dead_seconds for made in (counted, slow)]
    assert dead[1] - dead[0] == pytest.approx(16 * 0.1 - 0.01)  # time constants of 100 ms; 10 ms


@pytest.mark.parametrize("demo", ["strontium", "lead-thorium-uranium"])
def test_a_rehearsal_takes_what_was_forecast(demo: str, tmp_path: Path) -> None:
    """Cycle for cycle, from the record's own times: within a tenth."""
    text = (CONFIGS / demo / "sequence.toml").read_text(encoding="utf-8")
    for key in ("instrument", "sample"):
        old = next(line for line in text.splitlines() if line.startswith(f"{key} = "))
        path = (CONFIGS / demo / old.split('"')[1]).resolve()
        text = text.replace(old, f'{key} = "{path.as_posix()}"')
    text = text.replace("blocks = 5", "blocks = 1").replace("blocks = 4", "blocks = 1")
    text = text.replace("cycles_per_block = 12", "cycles_per_block = 6")
    text = text.replace("cycles_per_block = 15", "cycles_per_block = 6")
    job, record = tmp_path / "sequence.toml", tmp_path / "run.sqlite"
    job.write_text(text, encoding="utf-8")
    assert invoke(["rehearse", str(job), "--record", str(record), "--seed", "3"]) == 0
    with sqlite3.connect(record) as base:
        starts = [
            row[0] for row in base.execute("select min(started_ns) from readings group by block, cycle")
        ]
    base.close()
    settings = load_sequence(str(job)).settings
    expected = forecast(plan_route(settings, bench()), settings, bench())
    assert len(starts) == 6
    measured = (starts[-1] - starts[1]) / 4e9  # the first cycle has no move before it
    assert measured == pytest.approx(expected.dwell_seconds + expected.dead_seconds, rel=0.1)
    assert starts[0] / 1e9 == pytest.approx(expected.start_seconds + expected.centring_seconds, rel=0.2)
