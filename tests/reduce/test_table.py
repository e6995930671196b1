"""The terminal's table: narrow, plain, and honest about what is not known."""

from __future__ import annotations

import numpy as np
import pytest
from reduce_samples import MASSES, bench, sequence
from synthetic import Plan, Stop, rows

from controller.reduce.pipeline import reduce_rows
from controller.report.table import WIDTH, ratio_table


def _reduction():
    settings = sequence(
        ions={"206Pb+": 1.0, "208Pb+": 1.0, "84Sr+": 1.0},
        ratios=[("206Pb+", "208Pb+"), ("84Sr+", "208Pb+"), ("208Pb+", "84Sr+")],
        blocks=3,
        cycles=9,
    )
    stops = [Stop("206Pb+", 3e5, 1.0), Stop("208Pb+", 6e5, 1.0), Stop("84Sr+", 0.0, 1.0)]
    data = rows(Plan(stops, 3, 9, dead=20e-9), np.random.default_rng(1))
    return reduce_rows(data, settings, bench(u_dead=0.5e-9), MASSES)


def test_value_uncertainty_and_truth_side_by_side():
    reduction = _reduction()
    first = reduction.results[0]
    head, line, *_ = ratio_table(reduction, {"206Pb+/208Pb+": 0.5}).splitlines()
    assert head.split() == ["ratio", "value", "u/ppm", "U(95", "%)", "groups", "chi2", "truth", "diff/u"]
    name, value, ppm, _, groups, _, truth, away = line.split()
    assert name == "206Pb+/208Pb+"
    assert abs(float(value) - first.value) <= 0.05 * first.u  # two digits of u
    assert float(ppm) == round(1e6 * first.u / first.value)
    assert int(groups) == first.groups
    assert float(truth) == 0.5
    assert float(away) == round((first.value - 0.5) / first.u, 2)


def test_fits_a_terminal_in_plain_ascii():
    reduction = _reduction()
    for truth in (None, {"206Pb+/208Pb+": 0.5}, {"another/ratio": 1.0}):
        text = ratio_table(reduction, truth)
        assert max(len(line) for line in text.splitlines()) <= WIDTH
        assert "\t" not in text
        assert text.isascii()


def test_undefined_is_a_dash_with_its_reason_below():
    text = ratio_table(_reduction())
    line = next(line for line in text.splitlines() if line.startswith("208Pb+/84Sr+"))
    assert line.split()[1:] == ["-", "-", "-", "0", "-"]
    assert "208Pb+/84Sr+: No net signal" in text
    assert "nan" not in text


def test_parts_of_the_uncertainty_add_up():
    reduction = _reduction()
    first = reduction.results[0]
    line = next(
        line for line in ratio_table(reduction).splitlines() if line.startswith("  206Pb+/208Pb+: stat")
    )
    parts = [float(part.split(";")[0].split()[-1]) for part in line.split(": ")[1].split(", ")[:2]]
    assert np.hypot(*parts) == pytest.approx(1e6 * first.u / first.value, rel=0.02)
