"""Export: every table, units with it, nothing overwritten, values back bit for bit."""

from __future__ import annotations

import csv
import sys

import pyarrow.parquet
import pytest
from record_samples import fill

from controller.errors import ConfigRefused, RecordAtRisk
from controller.record import schema
from controller.record.export import export
from controller.record.reader import RecordReader


@pytest.fixture
def path(make):
    record = make()
    fill(record, 30)
    record.close()
    return record.path


def _rows(path, table):
    with RecordReader(path) as record:
        return list(record.rows(table))


def test_csv_round_trip_with_units(path, tmp_path):
    made = export(path, to="csv", out_dir=tmp_path / "out")
    assert sorted(file.stem for file in made) == sorted(schema.TABLES)
    with (tmp_path / "out" / "telemetry.csv").open(newline="") as stream:
        head, *rows = csv.reader(stream)
    assert head == [
        "tick",
        "at_ns [ns]",
        "notes",
        "magnet_amps [A]",
        "probe_tesla [T]",
        "esa_outer_volts [V]",
    ]
    back = [(int(r[0]), int(r[1]), None, float(r[3]), None, None) for r in rows]
    assert back == _rows(path, "telemetry")
    with (tmp_path / "out" / "readings.csv").open(newline="") as stream:
        readings = list(csv.DictReader(stream))
    assert [float(row["field_tesla [T]"]) for row in readings] == [row[-2] for row in _rows(path, "readings")]
    assert not list((tmp_path / "out").glob("*.tmp"))


def test_parquet_round_trip_with_units(path, tmp_path, monkeypatch):
    monkeypatch.setattr("controller.record.export.BATCH_ROWS", 7)  # several row groups
    export(path, to="parquet", out_dir=tmp_path / "out")
    for table in schema.TABLES:
        read = pyarrow.parquet.read_table(tmp_path / "out" / f"{table}.parquet")
        cells = [tuple(row.values()) for row in read.to_pylist()]
        assert cells == _rows(path, table), table
    layout = pyarrow.parquet.read_schema(tmp_path / "out" / "telemetry.parquet")
    assert layout.field("probe_tesla").metadata[b"unit"] == b"T"
    assert layout.metadata[b"trackfield.mode"] == b"SIMULATION"


def test_nothing_is_overwritten(path, tmp_path):
    out = tmp_path / "out"
    out.mkdir()
    (out / "events.csv").write_text("mine")
    with pytest.raises(RecordAtRisk, match=r"events\.csv exists already"):
        export(path, to="csv", out_dir=out)
    assert [file.name for file in out.iterdir()] == ["events.csv"]
    assert (out / "events.csv").read_text() == "mine"


def test_folder_that_cannot_be_written(path, tmp_path):
    (tmp_path / "plain").write_text("")
    with pytest.raises(RecordAtRisk, match="plain"):
        export(path, to="csv", out_dir=tmp_path / "plain")


def test_unknown_format(path, tmp_path):
    with pytest.raises(ConfigRefused, match="csv or parquet"):
        export(path, to="xlsx", out_dir=tmp_path / "out")


def test_missing_pyarrow_names_the_extra(path, tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(ConfigRefused, match=r"trackfield\[parquet\]"):
        export(path, to="parquet", out_dir=tmp_path / "out")
    assert not (tmp_path / "out").exists()
