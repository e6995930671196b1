"""Reading back: what is no record is refused in one line, what is torn is said."""

from __future__ import annotations

import os
import sqlite3
import subprocess
import sys
from pathlib import Path

import pytest
from record_samples import fill, reading

from controller.errors import ConfigRefused
from controller.record.reader import RecordReader, equal_rows, verify


def _made(make, name="run.sqlite", rows=5):
    record = make(name)
    fill(record, rows)
    record.close()
    return record.path


def _alter(path: Path, sql: str) -> None:
    connection = sqlite3.connect(path)
    connection.execute(sql)
    connection.commit()
    connection.close()


def test_what_is_no_record_is_refused_in_one_line(make, tmp_path):
    (tmp_path / "text.sqlite").write_text("not a database, only words\n" * 100)
    (tmp_path / "empty.sqlite").write_text("")
    other = sqlite3.connect(tmp_path / "other.sqlite")
    other.execute("CREATE TABLE t (x)")
    other.close()
    newer = _made(make, "newer.sqlite")
    _alter(newer, "PRAGMA user_version = 99")
    for name in ("missing.sqlite", "text.sqlite", "empty.sqlite", "other.sqlite", "newer.sqlite", "."):
        with pytest.raises(ConfigRefused) as caught:
            RecordReader(tmp_path / name)
        assert "\n" not in str(caught.value)
        assert "Next:" in str(caught.value)


def test_reading_changes_nothing(make):
    path = _made(make)
    before = path.read_bytes()
    with RecordReader(path) as read:
        assert len(list(read.readings())) == 5
        with pytest.raises(sqlite3.OperationalError, match="readonly"):
            read._connection.execute("DELETE FROM readings")
    assert path.read_bytes() == before


def test_verify_sees_a_missing_row_a_lost_end_and_a_changed_file(make):
    path = _made(make, "a")
    _alter(path, "DELETE FROM readings WHERE seq = 3")
    assert any("readings: 1 rows are missing" in problem for problem in verify(path))
    path = _made(make, "b")
    _alter(path, "DELETE FROM telemetry WHERE tick = 4")
    assert verify(path) == ["table telemetry: 4 rows, the run wrote 5"]
    path = _made(make, "c")
    _alter(path, "UPDATE files SET text = 'title = \"other\"'")
    assert verify(path) == ["file sequence sequence.toml: its SHA-256 is not the one recorded"]
    path = _made(make, "d")
    _alter(path, "ALTER TABLE readings DROP COLUMN flags")
    assert any("table readings: columns are" in problem for problem in verify(path))


def test_verify_sees_a_damaged_page(make):
    path = _made(make, rows=2000)
    content = bytearray(path.read_bytes())
    middle = len(content) // 2 // 8192 * 8192
    content[middle : middle + 64] = b"\xff" * 64
    path.write_bytes(content)
    assert verify(path)[0].startswith("SQLite:")


def test_equal_records_and_the_first_difference(make):
    first, second = _made(make, "a"), _made(make, "b")
    assert equal_rows(first, second) is None
    _alter(second, "UPDATE provenance SET value = 'another host' WHERE key = 'host'")
    assert equal_rows(first, second) is None
    _alter(second, "UPDATE readings SET total = total * (1 + 2.3e-16) WHERE seq = 4")
    difference = equal_rows(first, second)
    assert difference is not None
    assert (difference.table, difference.key) == ("readings", 4)
    assert "readings, row 4" in str(difference)


def test_a_longer_record_differs(make):
    first, second = _made(make, "a", rows=5), _made(make, "b", rows=6)
    difference = equal_rows(first, second)
    assert difference is not None
    assert difference.table in ("header", "telemetry", "readings")


def test_unmeasured_field_comes_back_as_nan(make):
    record = make()
    record.reading(reading(0)._replace(field_tesla=float("nan")))
    record.close()
    with RecordReader(record.path) as read:
        (row,) = read.readings()
    assert row.field_tesla != row.field_tesla


WRITE_ONE = """
import sys
from record_samples import CHANNELS, HEADER, fill
from controller.record.store import RunRecord
record = RunRecord.create(sys.argv[1], header=HEADER, channels=CHANNELS, durability="process")
fill(record, 50)
names = {"alpha", "beta", "gamma", "delta"}
record.event(1, "info", "set", "run", "text", {name: len(name) for name in names})
record.close()
"""


def test_two_processes_with_other_hash_seeds_write_equal_records(tmp_path):
    here = Path(__file__).parent
    for name, seed in (("a", "1"), ("b", "2")):
        env = {**os.environ, "PYTHONHASHSEED": seed, "PYTHONPATH": f"{here.parents[1]}{os.pathsep}{here}"}
        subprocess.run([sys.executable, "-c", WRITE_ONE, str(tmp_path / name)], env=env, check=True)
    assert equal_rows(tmp_path / "a", tmp_path / "b") is None


def test_ticks_that_a_late_program_missed_are_no_loss_and_others_are(make):
    """The supervisor says how many ticks it missed; a gap that nobody explains is a lost row."""
    explained, silent = make("late.sqlite"), make("lost.sqlite")
    for record in (explained, silent):
        for tick in (0, 1, 4, 5):
            record.telemetry(tick, tick * 50_000_000, [1.0, 2.0, 3.0], None)
    explained.event(5, "warning", "overrun", "tick", "late by 0.1 s", {"missed": 2})
    for record in (explained, silent):
        record.close()
    assert verify(explained.path) == []
    assert verify(silent.path) == ["table telemetry: 2 rows are missing between 0 and 5"]
