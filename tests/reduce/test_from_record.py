"""A record reduces by itself to what its rows reduce to, and the results survive the way back in."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from synthetic import Plan, Stop, rows

from controller.config.load import parse_instrument, parse_sequence
from controller.errors import ConfigRefused
from controller.record.reader import RecordReader, verify
from controller.record.store import RecordHeader, RunRecord
from controller.reduce.from_record import reduce_record
from controller.reduce.pipeline import reduce_rows

BENCH = Path(__file__).parents[2] / "configs" / "bench" / "instrument.toml"
MASSES = {"206Pb+": 205.974, "208Pb+": 207.976}  # no normalisation: the masses do not enter
SEQUENCE = """
title = "two lead ions"
instrument = "instrument.toml"
[run]
blocks = 2
cycles_per_block = 6
centre_every = 1
[[ions]]
ion = "206Pb+"
dwell = "1 s"
[[ions]]
ion = "208Pb+"
dwell = "1 s"
[[ratios]]
numerator = "206Pb+"
denominator = "208Pb+"
"""


def _record(path: Path, files: dict[str, str]) -> RunRecord:
    header = RecordHeader(title="t", instrument="i", mode="SIMULATION", virtual=True, seed=1)
    record = RunRecord.create(path, header=header, channels=[], durability="process")
    for role, text in files.items():
        record.file(role, f"{role}.toml", text)
    return record


def test_record_alone_is_enough(tmp_path):
    data = rows(
        Plan([Stop("206Pb+", 4e4, 1.0, 205.97), Stop("208Pb+", 8e4, 1.0, 207.98)], 2, 6),
        np.random.default_rng(1),
    )
    record = _record(tmp_path / "r", {"sequence": SEQUENCE, "instrument": BENCH.read_text()})
    for row in data:
        record.reading(row)
    record.close()
    reduction = reduce_record(tmp_path / "r")
    by_rows = reduce_rows(
        data, parse_sequence(SEQUENCE, "s"), parse_instrument(BENCH.read_text(), "i"), MASSES
    )
    assert reduction == by_rows

    again = _record(tmp_path / "again", {})
    for result in reduction.rows():
        again.result(result)
    again.close()
    with RecordReader(tmp_path / "again") as read:
        (row,) = read.results()
    assert row.value == reduction.results[0].value
    assert json.loads(row.components) == dict(reduction.results[0].components)
    assert json.loads(row.correlation) == {"206Pb+/208Pb+": pytest.approx(1.0)}
    assert verify(tmp_path / "again") == []


def test_a_record_without_its_files_is_refused(tmp_path):
    _record(tmp_path / "r", {"sequence": SEQUENCE}).close()
    with pytest.raises(ConfigRefused, match="no instrument file"):
        reduce_record(tmp_path / "r")
