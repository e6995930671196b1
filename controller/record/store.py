"""One run's record: an append-only SQLite file that a ``kill -9`` cannot take committed rows from.

``RunRecord`` implements ``controller.record.journal.Journal``. Rows said are kept in memory for a
moment and written in groups (``writer.py``); ``durable`` is the promise that they are on the disk.

Durability, stated in the header: "process" (WAL, synchronous NORMAL) survives the death of the
process, fit for rehearsals; "full" (WAL, synchronous FULL) also a power cut, as far as the disk
itself keeps the promise of its sync.
"""

from __future__ import annotations

import hashlib
import importlib.metadata
import json
import os
import platform
import shutil
import sqlite3
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Literal, NamedTuple, Self

from controller.errors import Defect, RecordAtRisk
from controller.record import schema
from controller.record.journal import DetectorRow
from controller.record.writer import Committer, InlineWriter, Row, ThreadWriter, Writer
from drivers.contract import Channel

FREE_BYTES_MIN = 64 * 2**20  # a record is not begun with less; an hour of telemetry is about 20 MB
PAGE_BYTES = 8192  # measured: 4096 costs 5 % more per row, 16384 doubles what a small commit writes
CHECKPOINT_PAGES = 2000  # 16 MB of -wal before it is copied into the file
# sqlite3 binds a NaN as NULL at once, but asks a None for an adapter first (0.4 us each).
NULL = float("nan")

Durability = Literal["full", "process"]


class RecordHeader(NamedTuple):
    """What the record is of. ``virtual``: rows come from virtual time, so no thread may be used."""

    title: str
    instrument: str
    mode: Literal["SIMULATION", "HARDWARE"]
    virtual: bool
    seed: int | None = None


class ResultRow(NamedTuple):
    """One ratio as it goes into ``results``; see ``schema.py`` for units. None: undefined."""

    name: str
    value: float
    u: float
    expanded: float
    coverage: float
    dof: float
    u_statistical: float
    components: str  # JSON
    correlation: str  # JSON
    groups: int
    cycles_used: int
    cycles_marked: int
    chi2: float | None
    autocorrelation: float | None
    floor_ratio: float | None
    notes: str


class RunRecord:
    """Append-only. No method but ``create``, ``durable`` and ``close`` raises on a full disk."""

    def __init__(self, path: Path, committer: Committer, writer: Writer) -> None:
        self.path = path
        self._writer = writer
        self._closed = False
        self._full_rows = writer.full_rows
        self._rows = committer.rows
        self._telemetry = committer.rows["telemetry"]

    @classmethod
    def create(
        cls,
        path: str | Path,
        *,
        header: RecordHeader,
        channels: Sequence[Channel],
        durability: Durability,
    ) -> Self:
        """Begin a record where nothing is yet. Raises RecordAtRisk; leaves nothing behind then."""
        path = Path(path)
        _claim(path)
        connection = sqlite3.connect(path, isolation_level=None, check_same_thread=False)
        try:
            tables = _lay_out(connection, header, channels, durability)
            _sync_folder(path.parent)
        except (sqlite3.Error, OSError, ValueError) as error:
            connection.close()
            path.unlink(missing_ok=True)
            if isinstance(error, ValueError):
                raise Defect(f"record {path}: {error}") from error
            raise RecordAtRisk(
                f"record {path}: cannot be begun: {error}. Next: check space and rights of the folder"
            ) from error
        statements = {table: schema.insert_sql(table, columns) for table, columns in tables.items()}
        committer = Committer(connection, statements)
        writer: Writer = (InlineWriter if header.virtual else ThreadWriter)(committer, str(path))
        return cls(path, committer, writer)

    @property
    def fault(self) -> str | None:
        """Why the record can no longer be trusted to grow; None while all is well."""
        return self._writer.fault

    # --- the journal -----------------------------------------------------------------------------

    def telemetry(self, tick: int, at_ns: int, values: Sequence[float | None], notes: str | None) -> None:
        """One tick. NaN is taken for None and is much the cheaper of the two."""
        if self._writer.broken or self._closed:
            return self._refuse()
        rows = self._telemetry
        rows.append((tick, at_ns, NULL if notes is None else notes, *values))
        if len(rows) >= self._full_rows:
            self._writer.full(at_ns)
        return None

    def request(
        self,
        at_ns: int,
        output: str,
        action: str,
        value: float | None,
        verdict: str,
        reason: str,
        measured: float | None,
        limit: float | None,
        age_ns: int | None,
    ) -> None:
        self._say("requests", (at_ns, output, action, value, verdict, reason, measured, limit, age_ns))

    def state(self, at_ns: int, source: str, event: str, target: str) -> None:
        self._say("states", (at_ns, source, event, target))

    def event(
        self,
        at_ns: int,
        severity: str,
        kind: str,
        source: str,
        text: str,
        data: Mapping[str, object] | None = None,
    ) -> None:
        packed = json.dumps(data, sort_keys=True, default=str) if data else None
        self._say("events", (at_ns, severity, kind, source, text, packed))

    def reading(self, row: DetectorRow) -> None:
        self._say("readings", row)

    async def durable(self) -> None:
        """Return when everything said so far is committed. Raises RecordAtRisk."""
        if self._closed:
            raise Defect(f"record {self.path}: waited for after its end")
        await self._writer.durable()

    # --- beside the journal ----------------------------------------------------------------------

    def file(self, role: str, name: str, text: str) -> None:
        """One input file, whole."""
        digest = hashlib.sha256(text.encode()).hexdigest()
        self._say("files", (role, name, digest, text))

    def centring(
        self,
        at_ns: int,
        station: str,
        block: int,
        what: str,
        asked: float,
        found: float | None,
        u: float | None,
        accepted: bool,
        detail: str,
    ) -> None:
        """One scan of a peak; ``asked``, ``found`` and ``u`` are factors on the voltages."""
        self._say("centrings", (at_ns, station, block, what, asked, found, u, accepted, detail))

    def result(self, row: ResultRow) -> None:
        """One ratio of the run."""
        self._say("results", row)

    def truth(self, name: str, value: float, unit: str = "1") -> None:
        """What the simulated plant really was; only in rehearsals."""
        self._say("truth", (name, value, unit))

    def close(self) -> None:
        """End the record: one file that stands alone. Raises RecordAtRisk if rows were lost.

        A second call does nothing.
        """
        if self._closed:
            return
        self._closed = True
        self._writer.finish()
        if self._writer.fault is not None:
            raise RecordAtRisk(self._writer.fault)

    def _say(self, table: str, row: Row) -> None:
        if self._writer.broken or self._closed:
            return self._refuse()
        rows = self._rows[table]
        rows.append(row)
        if len(rows) >= self._full_rows:
            self._writer.full(None)
        return None

    def _refuse(self) -> None:
        """Silence after a failed write (it was told once); a defect after the end."""
        if self._closed:
            raise Defect(f"record {self.path}: written to after its end")


def _claim(path: Path) -> None:
    """Make the empty file, so that of two programs only one can have it. Raises RecordAtRisk."""
    for suffix in ("", "-wal", "-shm", "-journal"):
        taken = Path(f"{path}{suffix}")
        if taken.exists() or taken.is_symlink():
            raise RecordAtRisk(
                f"record {taken} exists already and is never overwritten. "
                "Next: give another --record path, or move the old record with all its files away"
            )
    try:
        free_bytes = shutil.disk_usage(path.parent).free
        if free_bytes < FREE_BYTES_MIN:
            raise RecordAtRisk(
                f"record {path}: {free_bytes / 2**20:.0f} MiB free on this disk, "
                f"limit {FREE_BYTES_MIN / 2**20:.0f} MiB. Next: make space, or record elsewhere"
            )
        os.close(os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o644))
    except OSError as error:
        raise RecordAtRisk(
            f"record {path}: cannot be made: {error.strerror}. Next: give a --record path in a folder "
            "that exists and may be written to"
        ) from error


def _lay_out(
    connection: sqlite3.Connection, header: RecordHeader, channels: Sequence[Channel], durability: Durability
) -> dict[str, tuple[schema.Column, ...]]:
    """Settings of the connection, all tables, and what is known before the first row."""
    synchronous = "FULL" if durability == "full" else "NORMAL"
    execute = connection.execute
    execute(f"PRAGMA page_size={PAGE_BYTES}")
    execute("PRAGMA journal_mode=WAL").fetchall()
    execute(f"PRAGMA synchronous={synchronous}")
    execute(f"PRAGMA wal_autocheckpoint={CHECKPOINT_PAGES}").fetchall()
    execute(f"PRAGMA application_id={schema.APPLICATION_ID}")
    execute(f"PRAGMA user_version={schema.SCHEMA_VERSION}")
    tables = schema.tables_with(channels)
    stated = {
        "title": header.title,
        "instrument": header.instrument,
        "mode": header.mode,
        "seed": "" if header.seed is None else str(header.seed),
        "virtual": "yes" if header.virtual else "no",
        "durability": f"{durability} (WAL, synchronous {synchronous})",
    }
    first: dict[str, list[Row]] = {
        "columns": list(schema.column_rows(tables)),
        "header": list(stated.items()),
        "provenance": _provenance(connection),
        "channels": [(position, *channel) for position, channel in enumerate(channels)],
    }
    execute("BEGIN IMMEDIATE")
    for statement in schema.create_sql(tables):
        execute(statement)
    for table, rows in first.items():
        connection.executemany(schema.insert_sql(table, tables[table]), rows)
    execute("COMMIT")
    return tables


def _provenance(connection: sqlite3.Connection) -> list[Row]:
    # The database stamps its own beginning: the program's clock may be a virtual one.
    (started,) = connection.execute("SELECT strftime('%Y-%m-%dT%H:%M:%fZ', 'now')").fetchone()
    versions = [
        (f"version.{name}", _version(name)) for name in ("trackfield", "numpy", "pydantic", "transitions")
    ]
    return [
        *versions,
        ("version.python", platform.python_version()),
        ("version.sqlite", sqlite3.sqlite_version),
        ("host", platform.node()),
        ("platform", platform.platform()),
        ("started_utc", started),
    ]


def _version(name: str) -> str:
    try:
        return importlib.metadata.version(name)
    except importlib.metadata.PackageNotFoundError:
        return "not installed"


def _sync_folder(folder: Path) -> None:
    """A new file's name is safe only when its folder is."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
