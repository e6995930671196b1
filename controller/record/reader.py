"""Reading a record back: always read-only, never repairing, one clear line for what is no record."""

from __future__ import annotations

import hashlib
import json
import math
import sqlite3
from collections.abc import Iterator
from itertools import zip_longest
from pathlib import Path
from types import TracebackType
from typing import NamedTuple, Self
from urllib.parse import quote

from controller.errors import ConfigRefused
from controller.record import schema
from controller.record.journal import DetectorRow
from controller.record.store import ResultRow


class FileRow(NamedTuple):
    """One input file of the run, whole."""

    role: str
    name: str
    sha256: str
    text: str


class Difference(NamedTuple):
    """The first place where two records part: the row's key and both rows, None where one has ended."""

    table: str
    key: int
    first: tuple[object, ...] | None
    second: tuple[object, ...] | None

    def __str__(self) -> str:
        return f"table {self.table}, row {self.key}: {self.first!r} against {self.second!r}"


class RecordReader:
    """A record opened for reading, also while it is being written. Use as a context manager."""

    def __init__(self, path: str | Path) -> None:
        """Raises ConfigRefused where ``path`` is not a readable record of this schema."""
        self.path = Path(path)
        self._connection = _open(self.path)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._connection.close()

    def rows(self, table: str, columns: str = "*") -> Iterator[tuple[object, ...]]:
        """The rows of one table in order. Raises ConfigRefused where the file is damaged."""
        try:
            yield from self._connection.execute(f'SELECT {columns} FROM "{table}" ORDER BY rowid')
        except sqlite3.Error as error:
            raise _refused(self.path, f"table {table} cannot be read: {error}") from error

    def tables(self) -> dict[str, tuple[schema.Column, ...]]:
        """Tables and columns as this record describes itself, in the order of the schema."""
        found: dict[str, list[schema.Column]] = {}
        for table, column, unit, meaning in self.rows("columns", '"table", "column", unit, meaning'):
            found.setdefault(str(table), []).append(schema.Column(str(column), "", str(unit), str(meaning)))
        return {table: tuple(columns) for table, columns in found.items()}

    def header(self) -> dict[str, str]:
        return {str(key): str(value) for key, value in self.rows("header", "key, value")}

    def provenance(self) -> dict[str, str]:
        return {str(key): str(value) for key, value in self.rows("provenance", "key, value")}

    def files(self) -> list[FileRow]:
        return [
            FileRow(*(str(cell) for cell in row)) for row in self.rows("files", "role, name, sha256, text")
        ]

    def file(self, role: str) -> FileRow:
        """The input file of a role. Raises ConfigRefused where the record has none."""
        for row in self.files():
            if row.role == role:
                return row
        raise _refused(self.path, f"the record holds no {role} file")

    def channels(self) -> list[tuple[str, str]]:
        return [(str(name), str(unit)) for name, unit in self.rows("channels", "name, unit")]

    def readings(self) -> Iterator[DetectorRow]:
        """All gates in order; a value that was not measured comes back as NaN."""
        flag = DetectorRow._fields.index("overrange")
        for row in self.rows("readings", ", ".join(DetectorRow._fields)):
            cells = [math.nan if cell is None else cell for cell in row]
            cells[flag] = bool(cells[flag])
            yield DetectorRow(*cells)  # type: ignore[arg-type]

    def results(self) -> list[ResultRow]:
        return [ResultRow(*row) for row in self.rows("results", ", ".join(ResultRow._fields))]  # type: ignore[arg-type]

    def truth(self) -> dict[str, float]:
        return {str(name): float(str(value)) for name, value in self.rows("truth", "name, value")}


def verify(path: str | Path) -> list[str]:
    """What is wrong with a record, one sentence each; empty when it is whole. Raises ConfigRefused.

    Looks at SQLite's own integrity, the tables, gap-free keys, the files' digests, and whether the
    run ended its record with the number of rows that are there.
    """
    with RecordReader(path) as record:
        connection = record._connection
        try:
            found = [text for (text,) in connection.execute("PRAGMA integrity_check") if text != "ok"]
        except sqlite3.DatabaseError as error:  # so damaged that the check itself gives up
            found = [str(error)]
        if found:
            return [f"SQLite: {text}" for text in found]
        header = record.header()
        expected = schema.tables_with(record.channels())
        problems: list[str] = []
        for table, columns in expected.items():
            problems += _table_problems(connection, table, columns, header)
        problems += [
            f"file {file.role} {file.name}: its SHA-256 is not the one recorded"
            for file in record.files()
            if hashlib.sha256(file.text.encode()).hexdigest() != file.sha256
        ]
        if header.get("closed") != "yes":
            problems.append("the run ended without closing its record (killed, or still writing)")
    return problems


def _table_problems(
    connection: sqlite3.Connection, table: str, columns: tuple[schema.Column, ...], header: dict[str, str]
) -> list[str]:
    names = [row[1] for row in connection.execute(f'PRAGMA table_info("{table}")')]
    if names != [column.name for column in columns]:
        return [f"table {table}: columns are {names}"]
    count, first, last = connection.execute(
        f'SELECT count(*), min(rowid), max(rowid) FROM "{table}"'
    ).fetchone()
    problems = []
    lost = last - first + 1 - count if count else 0
    if table == "telemetry":
        lost -= _missed_ticks(connection)  # a real machine may be late; it says so, and that is no loss
    if lost:
        problems.append(f"table {table}: {lost} rows are missing between {first} and {last}")
    if count and columns[0].name == "seq" and first != 1:
        problems.append(f"table {table}: begins with row {first}")
    said = header.get(f"rows.{table}")
    if said is not None and int(said) != count:
        problems.append(f"table {table}: {count} rows, the run wrote {said}")
    return problems


def _missed_ticks(connection: sqlite3.Connection) -> int:
    overruns = connection.execute("SELECT data FROM events WHERE kind = 'overrun'").fetchall()
    return sum(int(json.loads(data)["missed"]) for (data,) in overruns)


def equal_rows(first: str | Path, second: str | Path) -> Difference | None:
    """The first difference between two records in anything but provenance; None when equal.

    Floats are compared bit for bit. Raises ConfigRefused where either is not a record.
    """
    with RecordReader(first) as one, RecordReader(second) as other:
        for table in one.tables():  # "columns" itself comes first, so that different tables show there
            if table in schema.NOT_COMPARED:
                continue
            for left, right in zip_longest(one.rows(table), other.rows(table)):
                if left != right:
                    key = (left or right)[0]
                    assert isinstance(key, int)
                    return Difference(table, key, left, right)
    return None


def _open(path: Path) -> sqlite3.Connection:
    if not path.is_file():
        raise _refused(path, "there is no such file" if not path.exists() else "it is not a file")
    connection = sqlite3.connect(
        f"file:{quote(str(path.absolute()))}?mode=ro", uri=True, isolation_level=None
    )
    try:
        (application,) = connection.execute("PRAGMA application_id").fetchone()
        (version,) = connection.execute("PRAGMA user_version").fetchone()
    except sqlite3.Error as error:
        connection.close()
        raise _refused(path, f"it cannot be read as a record ({error})") from error
    if application != schema.APPLICATION_ID:
        connection.close()
        raise _refused(path, "it is not a record of this program")
    if version != schema.SCHEMA_VERSION:
        connection.close()
        raise _refused(path, f"its schema version is {version}, this program reads {schema.SCHEMA_VERSION}")
    return connection


def _refused(path: Path, problem: str) -> ConfigRefused:
    return ConfigRefused(
        problem, file=str(path), next_action="give the path of a record made by a run or rehearsal"
    )
