"""The whole way on small runs whose answer is known: drift, marks, few data, shared inputs."""

from __future__ import annotations

import math

import numpy as np
import pytest
from reduce_samples import MASSES, bench, sequence
from synthetic import Plan, Stop, rows

from controller.reduce.pipeline import reduce_rows

IONS = {"206Pb+": 1.0, "208Pb+": 2.0}
RATIO = [("206Pb+", "208Pb+")]


def _settings(blocks=2, cycles=9, **tables):
    return sequence(ions=IONS, ratios=RATIO, blocks=blocks, cycles=cycles, **tables)


def _stops(light=4e4, heavy=8e4, **more):
    return [
        Stop("206Pb+", light, 1.0, MASSES["206Pb+"], **more),
        Stop("208Pb+", heavy, 2.0, MASSES["208Pb+"], **more),
    ]


def _rows(seed=1, blocks=2, cycles=9, **more):
    return rows(Plan(_stops(), blocks, cycles, **more), np.random.default_rng(seed))


def _exact(beam, blocks=2, cycles=9, light=4e4, heavy=8e4):
    """Rows without noise: totals are the integral of a beam given by its antiderivative."""
    plan = Plan(_stops(), blocks, cycles)
    found = []
    for row in rows(plan, np.random.default_rng(0)):
        low, high = row.started_ns / 1e9, row.ended_ns / 1e9
        rate = light if row.stop == "206Pb+" else heavy
        found.append(row._replace(total=rate * (beam(high) - beam(low))))
    return found


def _one(data, settings=None, instrument=None):
    (result,) = reduce_rows(data, settings or _settings(), instrument or bench(dead=0.0), MASSES).results
    return result


@pytest.mark.parametrize("degree", [1, 2])
def test_drift_of_the_degree_asked_for_leaves_nothing(degree):
    settings = _settings(reduction={"cycles_per_group": 4, "drift_degree": degree})
    curve = 3e-5 if degree == 2 else 0.0
    result = _one(_exact(lambda t: t + 0.01 * t**2 + curve * t**3, blocks=4), settings)
    assert result.value == pytest.approx(0.5, rel=1e-10)
    assert result.u_statistical < 1e-10
    left_alone = _one(
        _exact(lambda t: t + 0.01 * t**2 + curve * t**3), _settings(reduction={"drift_degree": 0})
    )
    assert abs(left_alone.value / 0.5 - 1) > 1e-3


def test_counting_data_have_the_uncertainty_that_counting_gives():
    settings = _settings(blocks=20, cycles=15, reduction={"cycles_per_group": 3})
    result = _one(_rows(blocks=20, cycles=15, drift=0.2), settings)
    # 300 cycles: 1.2e7 and 4.8e7 counts
    by_hand = 0.5 * math.sqrt(1 / (300 * 4e4) + 1 / (300 * 16e4))
    assert result.u == pytest.approx(by_hand, rel=0.2)
    assert (result.groups, result.cycles_used) == (100, 300)
    assert result.chi2 == pytest.approx(1.0, abs=0.45)
    assert result.floor_ratio == pytest.approx(1.0, abs=0.25)
    assert result.dof == 99
    assert len(result.series) == 100
    assert np.std([point.value for point in result.series]) == pytest.approx(10 * by_hand, rel=0.25)
    assert [p.u_counting for p in result.series] == pytest.approx([10 * by_hand] * 100, rel=0.1)


def test_marked_rows_are_kept_listed_and_not_used():
    data = _rows(cycles=10)
    spoiled = list(data)
    for index, row in enumerate(data):
        if (row.block, row.cycle, row.stop) == (0, 4, "206Pb+"):
            spoiled[index] = row._replace(flags="late", total=row.total * 3)
        if (row.block, row.cycle, row.stop) == (1, 0, "208Pb+"):
            spoiled[index] = row._replace(overrange=True, total=0.0)
    reduction = reduce_rows(spoiled, _settings(cycles=10), bench(dead=0.0), MASSES)
    (result,) = reduction.results
    assert result.value == pytest.approx(0.5, rel=5e-3)
    assert (result.cycles_used, result.cycles_marked) == (18, 2)
    listed = [(m.block, m.cycle, m.stop, m.marks) for m in reduction.marked]
    assert listed == [(0, 4, "206Pb+", "late"), (1, 0, "208Pb+", "overrange")]
    assert "2 marked dwells" in reduction.notes[0]
    left_out = [r for r in data if (r.block, r.cycle) not in {(0, 4), (1, 0)}]
    assert _one(left_out, _settings(cycles=10)).value == result.value


def test_an_older_centre_is_told_and_used():
    data = [row._replace(flags="uncentred") if row.block else row for row in _rows()]
    reduction = reduce_rows(data, _settings(), bench(dead=0.0), MASSES)
    assert reduction.results[0].cycles_used == 18
    assert reduction.marked == ()
    assert any("older centre" in note for note in reduction.notes)


def test_a_rate_that_dead_time_forbids_is_marked():
    data = _rows()
    data[4] = data[4]._replace(total=6e7)
    reduction = reduce_rows(data, _settings(), bench(dead=20e-9), MASSES)
    assert [m.marks for m in reduction.marked] == ["beyond-dead-time"]
    assert reduction.results[0].cycles_marked == 1


def test_centring_rows_are_not_data():
    data = _rows()
    scans = [data[0]._replace(kind="centring", total=1e9)] * 5
    assert _one(scans + data) == _one(data)


def test_dead_time_is_taken_out_before_the_background():
    dead, n, b = 20e-9, 8e5, 4e5
    stops = [
        Stop("206Pb+", n / 2, 1.0, MASSES["206Pb+"], b),
        Stop("208Pb+", n, 2.0, MASSES["208Pb+"], b),
        Stop("between", 0.0, 1.0, 207.0, b, kind="background"),
    ]
    plan = Plan(stops, 2, 9, dead=dead)
    exact = []
    for row in rows(plan, np.random.default_rng(0)):
        true = b + {"206Pb+": n / 2, "208Pb+": n, "between": 0.0}[row.stop]
        exact.append(row._replace(total=true / (1 + true * dead) * row.live_seconds))
    settings = _settings(backgrounds=[{"name": "between", "mass_to_charge": "207 u", "dwell": "1 s"}])
    assert _one(exact, settings, bench(dead=dead)).value == pytest.approx(0.5, rel=1e-12)


def test_background_is_taken_block_by_block():
    stops = [*_stops(), Stop("between", 0.0, 1.0, 207.0, kind="background")]
    data = []
    for row in rows(Plan(stops, 2, 9), np.random.default_rng(0)):
        rate = {"206Pb+": 4e4, "208Pb+": 8e4, "between": 0.0}[row.stop] + (500.0 if row.block else 20.0)
        data.append(row._replace(total=rate * row.live_seconds))
    assert _one(data).value == pytest.approx(0.5, rel=1e-12)
    untouched = _one(data, _settings(reduction={"background": "none"}))
    assert untouched.value > 0.5 * 1.002


def test_background_model_uncertainty_is_a_share_of_the_tail():
    stops = [Stop("206Pb+", 900.0, 1.0, MASSES["206Pb+"], 100.0), Stop("208Pb+", 9e5, 2.0, MASSES["208Pb+"])]
    stops.append(Stop("near", 0.0, 1.0, 206.5, 100.0, kind="background"))
    data = rows(Plan(stops, 3, 12), np.random.default_rng(0))
    result = _one(data, _settings(blocks=3, cycles=12, reduction={"tail_u": 0.1, "background": "nearest"}))
    assert result.components["background model"] / result.value == pytest.approx(10 / 900, rel=0.05)
    assert 0 < result.components["background counting near"] < result.u_statistical


def test_two_ratios_of_one_run_are_correlated_through_what_they_share():
    settings = sequence(
        ions={"206Pb+": 1.0, "208Pb+": 1.0, "84Sr+": 1.0},
        ratios=[("206Pb+", "208Pb+"), ("84Sr+", "208Pb+"), ("208Pb+", "206Pb+")],
        blocks=2,
        cycles=9,
    )
    stops = [Stop("206Pb+", 1e3, 1.0), Stop("208Pb+", 1e6, 1.0), Stop("84Sr+", 2e3, 1.0)]
    data = rows(Plan(stops, 2, 9, dead=20e-9), np.random.default_rng(3))
    reduction = reduce_rows(data, settings, bench(u_dead=50e-9), MASSES)
    joint = np.array(reduction.covariance)
    np.testing.assert_allclose(np.sqrt(np.diag(joint)), [r.u for r in reduction.results], rtol=1e-12)
    assert np.linalg.eigvalsh(joint / np.sqrt(np.outer(np.diag(joint), np.diag(joint)))).min() > -1e-9
    assert reduction.correlation(0, 1) > 0.5  # one dead time under both
    assert reduction.correlation(0, 2) == pytest.approx(-1.0, abs=1e-3)  # a ratio and its inverse
    # d ln(R) = (n1 - n2) d tau for the non-paralyzable law
    expected = abs(1e3 - 1e6) * 50e-9
    assert reduction.results[0].components["dead time"] / reduction.results[0].value == pytest.approx(
        expected, rel=0.01
    )


def test_the_normalising_ratio_is_what_it_was_told_to_be():
    settings = sequence(
        ions={"86Sr+": 1.0, "88Sr+": 1.0, "87Sr+": 1.0},
        ratios=[("86Sr+", "88Sr+"), ("87Sr+", "86Sr+")],
        blocks=2,
        cycles=9,
        normalisation={"numerator": "86Sr+", "denominator": "88Sr+", "value": 0.1194, "u": 1e-5},
    )
    stops = [Stop("86Sr+", 1e4, 1.0), Stop("88Sr+", 9e4, 1.0), Stop("87Sr+", 7e3, 1.0)]
    reduction = reduce_rows(rows(Plan(stops, 2, 9), np.random.default_rng(3)), settings, bench(), MASSES)
    told, free = reduction.results
    assert told.value == pytest.approx(0.1194, rel=1e-12)
    assert told.u == pytest.approx(1e-5, rel=1e-9)
    assert told.chi2 is None
    assert any("normalising ratio" in note for note in told.notes)
    # half of the normalising ratio's relative u enters 87/86: ln(m87/m86)/ln(m86/m88) = -0.5036
    assert free.components["normalising ratio"] / free.value == pytest.approx(
        0.50359 * 1e-5 / 0.1194, rel=1e-3
    )
    assert free.exponent is not None


# --- few data ------------------------------------------------------------------------------------


def test_one_group_quotes_counting_statistics_and_says_so():
    result = _one(_rows(blocks=1, cycles=3), _settings(blocks=1, cycles=3))
    assert result.groups == 1
    assert result.u == pytest.approx(0.5 * math.sqrt(1 / 12e4 + 1 / 48e4), rel=0.1)
    assert result.chi2 is None
    assert any("One group" in note for note in result.notes)


def test_a_single_cycle_gives_a_value_without_drift_correction():
    result = _one(_rows(blocks=1, cycles=1), _settings(blocks=1, cycles=1))
    assert result.value == pytest.approx(0.5, rel=0.03)
    assert any("degree 0" in note for note in result.notes)
    assert math.isfinite(result.u)


def test_a_run_that_ended_early_uses_what_is_whole():
    data = _rows(blocks=2, cycles=9)
    result = _one(data[:-7])  # ends inside a cycle
    assert result.cycles_used < 18
    assert any("incomplete" in note for note in result.notes)
    assert result.value == pytest.approx(0.5, rel=5e-3)


def test_an_ion_without_a_single_count():
    data = [row._replace(total=0.0) if row.stop == "206Pb+" else row for row in _rows()]
    result = _one(data)
    assert result.value == 0.0
    # one count in 18 s over 8e4 counts a second
    assert result.u == pytest.approx(1 / 18 / 8e4, rel=0.01)
    assert any("No count of 206Pb+" in note for note in result.notes)


@pytest.mark.parametrize("spoil", ["empty", "all marked", "no denominator"])
def test_no_value_is_nan_with_a_note_and_never_an_exception(spoil):
    data = [] if spoil == "empty" else _rows()
    if spoil == "all marked":
        data = [row._replace(flags="trip") for row in data]
    if spoil == "no denominator":
        data = [row._replace(total=0.0) if row.stop == "208Pb+" else row for row in data]
    reduction = reduce_rows(data, _settings(), bench(), MASSES)
    (result,) = reduction.results
    assert math.isnan(result.value)
    assert math.isnan(result.u)
    assert any("no value" in note for note in result.notes)
    assert result.as_json()["value"] is None
    assert reduction.rows()[0].groups == 0


def test_masses_may_come_from_a_function():
    data = _rows()
    by_function = reduce_rows(data, _settings(), bench(), lambda label: MASSES[label])
    assert by_function == reduce_rows(data, _settings(), bench(), MASSES)
