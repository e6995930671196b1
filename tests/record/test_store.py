"""The record's promises: nothing overwritten, nothing committed lost, one fault and no retry."""

from __future__ import annotations

import asyncio
import os
import resource
import shutil
import sqlite3
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest
from record_samples import CHANNELS, HEADER, fill, reading

from controller.errors import Defect, RecordAtRisk
from controller.record import schema, writer
from controller.record.reader import RecordReader, verify
from controller.record.store import RunRecord
from drivers.clock import VirtualLoop
from drivers.contract import Channel


def test_everything_said_reads_back(make):
    record = make()
    fill(record)
    record.close()
    with RecordReader(record.path) as read:
        assert list(read.readings()) == [reading(number) for number in range(5)]
        assert list(read.rows("telemetry")) == [
            (n, n * 50_000_000, None, 1.5 * n, None, None) for n in range(5)
        ]
        assert next(read.rows("requests")) == (
            1, 10, "accelerating", "write", 8000.0, "refusal", "slope", 9000.0, 8100.0, 40,
        )  # fmt: skip
        assert list(read.rows("states")) == [(1, 20, "parked", "prove", "proving")]
        assert list(read.rows("events", "data")) == [('{"a": [1, "x"], "b": 2}',)]
        assert read.truth() == {"208Pb+/206Pb+": 2.1681}
        assert read.file("sequence").text == 'title = "demo"\n'
        assert read.channels() == [tuple(channel) for channel in CHANNELS]
        header = read.header()
    assert (header["mode"], header["seed"], header["virtual"]) == ("SIMULATION", "7", "yes")
    assert "NORMAL" in header["durability"]
    assert verify(record.path) == []


def test_closed_record_is_one_file_and_opens_on_read_only_media(make):
    record = make()
    fill(record)
    record.close()
    record.close()  # the second call does nothing
    assert [path.name for path in record.path.parent.iterdir()] == ["run.sqlite"]
    folder = record.path.parent
    connection = sqlite3.connect(f"file:{record.path}?mode=ro&immutable=1", uri=True)
    assert connection.execute("SELECT count(*) FROM readings").fetchone() == (5,)
    connection.close()
    assert os.listdir(folder) == ["run.sqlite"]


def test_columns_table_documents_every_column_with_its_unit(make):
    record = make()
    record.close()
    connection = sqlite3.connect(record.path)
    tables = [name for (name,) in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
    real = {(table, row[1]) for table in tables for row in connection.execute(f"PRAGMA table_info({table})")}
    told = {
        (table, column): (unit, meaning)
        for table, column, unit, meaning in connection.execute(
            'SELECT "table", "column", unit, meaning FROM columns'
        )
    }
    kinds = {
        (table, row[1]): row[2]
        for table in tables
        for row in connection.execute(f"PRAGMA table_info({table})")
    }
    assert connection.execute("PRAGMA application_id").fetchone() == (schema.APPLICATION_ID,)
    assert connection.execute("PRAGMA user_version").fetchone() == (schema.SCHEMA_VERSION,)
    connection.close()
    assert set(told) == real
    assert told["telemetry", "magnet_amps"][0] == "A"
    for place, (unit, meaning) in told.items():
        assert meaning, place
        assert unit or kinds[place] == "TEXT", f"{place}: a number without a unit"


def test_existing_record_is_not_touched(make):
    record = make()
    fill(record)
    record.close()
    before = record.path.read_bytes()
    with pytest.raises(RecordAtRisk, match=r"run\.sqlite exists already"):
        make()
    assert record.path.read_bytes() == before


@pytest.mark.parametrize("suffix", ["-wal", "-shm", "-journal"])
def test_leftovers_of_a_killed_run_are_not_adopted(make, tmp_path, suffix):
    (tmp_path / f"run.sqlite{suffix}").write_bytes(b"")
    with pytest.raises(RecordAtRisk, match=suffix):
        make()
    assert not (tmp_path / "run.sqlite").exists()


def test_missing_and_unusable_folders(make, tmp_path):
    with pytest.raises(RecordAtRisk, match="nowhere"):
        make("nowhere/run.sqlite")
    (tmp_path / "plain").write_text("")
    with pytest.raises(RecordAtRisk, match=r"plain.run"):
        make("plain/run.sqlite")


def test_folder_without_write_permission(make, monkeypatch):
    def refuse(*args, **more):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(os, "open", refuse)  # permissions do not bind the superuser that tests may run as
    with pytest.raises(RecordAtRisk, match="Permission denied"):
        make()


def test_full_disk_at_the_start(make, tmp_path, monkeypatch):
    usage = shutil.disk_usage(tmp_path)._replace(free=10 * 2**20)
    monkeypatch.setattr(shutil, "disk_usage", lambda path: usage)
    with pytest.raises(RecordAtRisk, match="10 MiB free"):
        make()
    assert list(tmp_path.iterdir()) == []


def test_channels_that_cannot_be_columns_are_a_defect(tmp_path):
    for channels in ([Channel("Magnet amps", "A")], [Channel("a.b", "A"), Channel("a_b", "A")]):
        with pytest.raises(Defect):
            RunRecord.create(tmp_path / "x", header=HEADER, channels=channels, durability="process")
        assert list(tmp_path.iterdir()) == []


def test_writing_after_the_end_is_a_defect(make):
    record = make()
    record.close()
    with pytest.raises(Defect, match="after its end"):
        record.state(1, "parked", "prove", "proving")


DISK_FULL = """
import asyncio, resource, sys
from record_samples import CHANNELS, HEADER, reading
from controller.errors import RecordAtRisk
from controller.record.store import RunRecord

async def main(virtual):
    record = RunRecord.create(
        sys.argv[1], header=HEADER._replace(virtual=virtual), channels=CHANNELS, durability="full")
    resource.setrlimit(resource.RLIMIT_FSIZE, (400_000, resource.RLIM_INFINITY))
    said = 0
    while record.fault is None and said < 200_000:
        record.reading(reading(said))
        said += 1
        if said % 200 == 0:
            try:
                await record.durable()
                acknowledged = said
            except RecordAtRisk as error:
                assert str(error) == record.fault
    fault, more = record.fault, len(record._rows["readings"])
    for number in range(5000):
        record.reading(reading(number))
        record.telemetry(number, number, [1.0, 2.0, 3.0], None)
    assert record.fault == fault, "the first fault must stay"
    assert len(record._rows["readings"]) == more, "memory must not grow on a full disk"
    try:
        record.close()
    except RecordAtRisk as error:
        print(acknowledged, error)

asyncio.run(main(sys.argv[2] == "virtual"))
"""


def _child(code: str, *arguments: str, **more: object) -> subprocess.Popen[str]:
    here = Path(__file__).parent
    env = {**os.environ, "PYTHONPATH": f"{here.parents[1]}{os.pathsep}{here}"}
    command = [sys.executable, "-c", code, *arguments]
    return subprocess.Popen(
        command, env=env, text=True, stdout=subprocess.PIPE, stderr=subprocess.PIPE, **more
    )


@pytest.mark.parametrize("mode", ["virtual", "real"])
def test_a_disk_that_fills_up_makes_one_fault_and_keeps_what_was_acknowledged(tmp_path, mode):
    path = tmp_path / "run.sqlite"
    child = _child(DISK_FULL, str(path), mode)
    out, err = child.communicate(timeout=60)
    assert child.returncode == 0, err
    acknowledged, _, message = out.partition(" ")
    assert "Next:" in message
    assert int(acknowledged) > 0
    with RecordReader(path) as read:
        rows = list(read.readings())
    assert rows[: int(acknowledged)] == [reading(number) for number in range(int(acknowledged))]


class _BrokenConnection:
    """An sqlite3 connection whose writes fail from the given one on, and which counts attempts."""

    def __init__(self, connection: sqlite3.Connection, message: str) -> None:
        self._connection, self._message = connection, message
        self.attempts = 0

    def execute(self, sql: str):
        return self._connection.execute(sql)

    def executemany(self, sql: str, rows: object):
        self.attempts += 1
        raise sqlite3.OperationalError(self._message)

    def close(self) -> None:
        self._connection.close()


@pytest.mark.parametrize("virtual", [True, False])
def test_the_first_write_error_is_final_and_never_retried(make, virtual):
    record = make(virtual=virtual)
    broken = _BrokenConnection(record._writer._committer.connection, "database or disk is full")
    record._writer._committer.connection = broken

    async def run() -> None:
        record.state(1, "parked", "prove", "proving")
        with pytest.raises(RecordAtRisk, match=r"disk is full.*make space"):
            await record.durable()
        record.state(2, "proving", "proved", "ready")
        with pytest.raises(RecordAtRisk):
            await record.durable()

    asyncio.run(run())
    assert record.fault is not None
    with pytest.raises(RecordAtRisk, match="disk is full"):
        record.close()
    assert broken.attempts == 1


def test_virtual_time_uses_no_thread_and_durable_is_kept(make):
    async def run() -> list[object]:
        record = make()
        record.reading(reading(0))
        await record.durable()
        with RecordReader(record.path) as read:  # a second connection sees what is committed
            found = list(read.readings())
        record.close()
        return found

    before = threading.active_count()
    with asyncio.Runner(loop_factory=VirtualLoop) as runner:
        assert runner.run(run()) == [reading(0)]
    assert threading.active_count() == before


def test_real_time_commits_by_itself_within_the_period(make):
    record = make(virtual=False)
    record.reading(reading(0))
    deadline = time.monotonic() + 5
    found: list[object] = []
    while not found and time.monotonic() < deadline:
        time.sleep(writer.PERIOD_SECONDS / 4)
        with RecordReader(record.path) as read:
            found = list(read.readings())
    assert found == [reading(0)]
    record.close()
    assert verify(record.path) == []


def test_a_stuck_disk_is_told_and_nothing_is_dropped(make):
    record = make(virtual=False)
    committer = record._writer._committer
    release = threading.Event()
    commit = committer.commit

    def stuck() -> None:
        release.wait(10)
        commit()

    committer.commit = stuck
    time.sleep(2 * writer.PERIOD_SECONDS)  # let the thread enter the stuck commit
    for tick in range(80):
        record.telemetry(tick, tick * 50_000_000, [0.0, 0.0, 0.0], None)
    assert "not on the disk yet" in str(record.fault)
    release.set()
    with pytest.raises(RecordAtRisk, match="not on the disk yet"):
        record.close()
    with RecordReader(record.path) as read:
        assert len(list(read.rows("telemetry"))) == 80


KILLED = """
import asyncio, sys
from record_samples import CHANNELS, HEADER, reading
from controller.record.store import RunRecord

async def main(virtual):
    record = RunRecord.create(
        sys.argv[1], header=HEADER._replace(virtual=virtual), channels=CHANNELS,
        durability="process" if virtual else "full")
    said = 0
    while True:
        for _ in range(7):
            record.reading(reading(said))
            record.telemetry(said, said, [1.0, 2.0, 3.0], None)
            said += 1
        await record.durable()
        print(said, flush=True)

asyncio.run(main(sys.argv[2] == "virtual"))
"""


@pytest.mark.parametrize("attempt", range(10))
def test_kill_9_loses_no_acknowledged_row(tmp_path, attempt):
    path = tmp_path / "run.sqlite"
    child = _child(KILLED, str(path), "virtual" if attempt % 2 else "real")
    assert child.stdout is not None
    acknowledged = int(child.stdout.readline())
    time.sleep(0.002 * attempt)
    child.kill()
    rest = child.stdout.read().split("\n")
    child.communicate()
    acknowledged = max([acknowledged, *(int(line) for line in rest[:-1])])  # the last line may be torn
    with RecordReader(path) as read:
        rows = list(read.readings())
        ticks = [tick for (tick,) in read.rows("telemetry", "tick")]
    assert len(rows) >= acknowledged
    assert rows == [reading(number) for number in range(len(rows))]
    assert ticks == list(range(len(rows)))
    assert verify(path) == ["the run ended without closing its record (killed, or still writing)"]


def test_memory_is_flat_with_run_length(make):
    record = make()
    values = [1.0, 2.0, 3.0]
    peaks = []
    for part in range(4):
        for tick in range(part * 20_000, (part + 1) * 20_000):
            record.telemetry(tick, tick, values, None)
            record.reading(reading(0))
        peaks.append(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
        assert max(len(rows) for rows in record._rows.values()) <= writer.FLUSH_ROWS
    record.close()
    assert peaks[-1] - peaks[0] < 8_000  # KiB; 60 000 rows kept would be about 30 000
