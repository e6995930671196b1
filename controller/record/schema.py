"""The tables of a run record, as data.

One SQLite file is one run. Every table, column, unit and meaning is written here once; the DDL, the
``columns`` table inside each record, the reader's checks and the export's headers all come from it.

Standing rules:

* Each table has an integer primary key that counts up by one without a gap, in the order in which
  rows were said: ``seq`` from 1, ``position`` from 0, or the supervisor's ``tick``.
* All values are SI (m/z in u); times are integer nanoseconds of the run's monotonic clock.
* NULL means "not measured" or "does not apply"; it never stands for zero.
* Only ``provenance`` may differ between two rehearsals with equal files and seed.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from typing import NamedTuple

APPLICATION_ID = 0x54464C44  # "TFLD" in the file's own header, so that other tools can name it
SCHEMA_VERSION = 1
NOT_COMPARED = ("provenance",)
# Tables whose length is told in the header at the end, so that a torn record shows.
COUNTED = ("telemetry", "requests", "states", "events", "readings", "centrings", "results", "truth")

_CHANNEL_NAME = re.compile(r"[a-z][a-z0-9_]*(\.[a-z0-9_]+)*")


class Column(NamedTuple):
    """``kind`` is SQLite's type; ``unit`` is "" for words, "1" for plain numbers."""

    name: str
    kind: str
    unit: str
    meaning: str


def _key(meaning: str, name: str = "seq") -> Column:
    return Column(name, "INTEGER PRIMARY KEY", "1", meaning)


def _text(name: str, meaning: str) -> Column:
    return Column(name, "TEXT", "", meaning)


def _count(name: str, meaning: str) -> Column:
    return Column(name, "INTEGER", "1", meaning)


def _real(name: str, unit: str, meaning: str) -> Column:
    return Column(name, "REAL", unit, meaning)


_AT = Column("at_ns", "INTEGER", "ns", "monotonic clock of the run")
_SEQ = _key("order in which rows were said, from 1 without gaps")

TABLES: dict[str, tuple[Column, ...]] = {
    "columns": (
        _SEQ,
        _text("table", "table that has the column"),
        _text("column", "the column"),
        _text("unit", "SI symbol (u for masses); empty for words, 1 for plain numbers"),
        _text("meaning", "what it holds"),
    ),
    "header": (
        _SEQ,
        _text(
            "key",
            "title, instrument, mode, seed, virtual, durability; at the end: closed, rows of each table",
        ),
        _text("value", "its value"),
    ),
    "provenance": (
        _SEQ,
        _text("key", "program and library versions, host, real start time; not part of determinism"),
        _text("value", "its value"),
    ),
    "files": (
        _SEQ,
        _text("role", "sequence, instrument, sample or faults"),
        _text("name", "path as given"),
        _text("sha256", "SHA-256 of the text as UTF-8, hexadecimal"),
        _text("text", "the whole file"),
    ),
    "channels": (
        _key("order of the telemetry's channels, from 0", "position"),
        _text("name", "role.quantity"),
        _text("unit", "SI symbol"),
    ),
    "telemetry": (
        _key("number of the supervisor's tick, counting up by one", "tick"),
        _AT,
        _text("notes", "JSON: anything unusual about this tick's readings; NULL when there is nothing"),
    ),
    "requests": (
        _SEQ,
        _AT,
        _text("output", "output that the request was about"),
        _text("action", "enable, disable, write or limits"),
        _real("value", "SI of the output", "set-point asked for"),
        _text("verdict", "permit, refusal or trip"),
        _text("reason", "why, in the guard's words"),
        _real("measured", "SI of the reason", "value on which the verdict rests"),
        _real("limit", "SI of the reason", "limit that it was held against"),
        Column("age_ns", "INTEGER", "ns", "age of the measured value"),
    ),
    "states": (
        _SEQ,
        _AT,
        _text("source", "state before"),
        _text("event", "event taken"),
        _text("target", "state after"),
    ),
    "events": (
        _SEQ,
        _AT,
        _text("severity", "info, warning or trip"),
        _text("kind", "one word for searching"),
        _text("source", "who says it"),
        _text("text", "for a person"),
        _text("data", "JSON with sorted keys; NULL when there is none"),
    ),
    "readings": (
        _SEQ,
        _count("block", "from 0"),
        _count("cycle", "within the block, from 0"),
        _text("station", "magnet station"),
        _text("stop", "ion's label or background position's name"),
        _text("kind", "ion, background or centring"),
        _text("detector", "counter or electrometer"),
        Column("started_ns", "INTEGER", "ns", "gate opened, monotonic clock of the run"),
        Column("ended_ns", "INTEGER", "ns", "gate closed, monotonic clock of the run"),
        _real("live_seconds", "s", "gate's length as the device measured it; dead time not removed"),
        _real("total", "1 or V s", "pulses of a counter, volt-seconds of an electrometer"),
        _count("overrange", "1 when the detector said that it was over range"),
        _real("mass_to_charge", "u", "mass per elementary charge asked for"),
        _real("accel_volts", "V", "accelerating voltage read back"),
        _real("esa_volts", "V", "ESA voltage read back, outer minus inner"),
        _real("field_tesla", "T", "field probe, mean over the dwell"),
        _text("flags", "space-separated marks; empty when clean"),
    ),
    "centrings": (
        _SEQ,
        _AT,
        _text("station", "magnet station"),
        _count("block", "block that follows"),
        _text("what", "which scan: wide, fine or energy"),
        _real("asked", "1", "factor on the voltages around which was scanned"),
        _real("found", "1", "factor at the centre; NULL where no peak was found"),
        _real("u", "1", "standard uncertainty of the centre"),
        _count("accepted", "1 when the centre was taken over"),
        _text("detail", "the scan as factor:signal pairs, with the reason when refused"),
    ),
    "results": (
        _SEQ,
        _text("name", "numerator/denominator"),
        _real("value", "1", "ratio after all corrections"),
        _real("u", "1", "combined standard uncertainty"),
        _real("expanded", "1", "half width of the 95 % interval"),
        _real("coverage", "1", "factor between the two"),
        _real("dof", "1", "effective degrees of freedom (Welch-Satterthwaite)"),
        _real("u_statistical", "1", "part of u from the scatter of groups"),
        _text("components", "JSON: systematic components of u by input quantity"),
        _text("correlation", "JSON: correlation coefficient with each ratio of the run"),
        _count("groups", "groups of cycles used"),
        _count("cycles_used", "cycles in those groups"),
        _count("cycles_marked", "cycles kept in the record and not used because of a mark"),
        _real("chi2", "1", "reduced chi-squared of the groups against counting statistics"),
        _real("autocorrelation", "1", "lag 1, between successive groups"),
        _real("floor_ratio", "1", "statistical uncertainty over the counting-limited floor"),
        _text("notes", "what a reader must know, one sentence each"),
    ),
    "truth": (
        _SEQ,
        _text("name", "ratio or hidden parameter of the simulated plant"),
        _real("value", "given by unit", "what it really was"),
        _text("unit", "SI symbol of the value"),
    ),
}


def channel_column(channel: str) -> str:
    """The telemetry column of channel "role.quantity". Raises ValueError on any other form."""
    if not _CHANNEL_NAME.fullmatch(channel):
        raise ValueError(f"channel name {channel!r} is not lower-case words joined by dots")
    return channel.replace(".", "_")


def tables_with(channels: Sequence[tuple[str, str]]) -> dict[str, tuple[Column, ...]]:
    """All tables, the telemetry widened by one column per (name, unit). Raises ValueError."""
    wide = [
        _real(
            channel_column(name),
            unit,
            f"{name} as heard since the last tick; NULL where nothing new was heard",
        )
        for name, unit in channels
    ]
    taken = [column.name for column in (*TABLES["telemetry"], *wide)]
    if len(set(taken)) != len(taken):
        raise ValueError("two channels would share one telemetry column")
    return {**TABLES, "telemetry": (*TABLES["telemetry"], *wide)}


def create_sql(tables: Mapping[str, Sequence[Column]]) -> list[str]:
    """One CREATE TABLE statement a table."""
    return [
        f'CREATE TABLE "{table}" (' + ", ".join(f'"{column.name}" {column.kind}' for column in columns) + ")"
        for table, columns in tables.items()
    ]


def insert_sql(table: str, columns: Sequence[Column]) -> str:
    """The INSERT of one row; ``seq`` is left to SQLite, which numbers rows in order."""
    given = [f'"{column.name}"' for column in columns if column.name != "seq"]
    return f'INSERT INTO "{table}" ({", ".join(given)}) VALUES ({", ".join("?" * len(given))})'


def column_rows(tables: Mapping[str, Sequence[Column]]) -> list[tuple[str, str, str, str]]:
    """The contents of the ``columns`` table."""
    return [
        (table, column.name, column.unit, column.meaning)
        for table, columns in tables.items()
        for column in columns
    ]
