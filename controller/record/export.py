"""A record as one file a table, for other people's tools.

CSV carries the unit in each column's name, "accel_volts [V]"; Parquet carries unit and meaning in the
field's metadata and the run's header in the file's. NULL is an empty cell in CSV and a null in
Parquet. A file is written under another name and renamed when complete; nothing is overwritten.
"""

from __future__ import annotations

import csv
import os
from collections.abc import Iterator
from itertools import islice
from pathlib import Path
from typing import Any, Literal

from controller.errors import ConfigRefused, RecordAtRisk
from controller.record import schema
from controller.record.reader import RecordReader

BATCH_ROWS = 20_000


def export(path: str | Path, *, to: Literal["csv", "parquet"], out_dir: str | Path) -> list[Path]:
    """Write every table of the record into ``out_dir``; returns the files made.

    Raises ConfigRefused (no record, unknown format, pyarrow missing) and RecordAtRisk (a file
    exists, the folder cannot be written).
    """
    if to not in ("csv", "parquet"):
        raise ConfigRefused(
            f"unknown format {to!r}", file=str(path), limit="csv or parquet", next_action="choose one of them"
        )
    arrow = _arrow(path) if to == "parquet" else None
    folder = Path(out_dir)
    made: list[Path] = []
    with RecordReader(path) as record:
        tables = schema.tables_with(record.channels())
        targets = {table: folder / f"{table}.{to}" for table in tables}
        try:
            folder.mkdir(parents=True, exist_ok=True)
            for target in targets.values():
                _refuse_existing(target)
            for table, columns in tables.items():
                target, draft = targets[table], _draft(targets[table])
                if arrow is None:
                    _write_csv(record, table, columns, draft)
                else:
                    _write_parquet(arrow, record, table, columns, draft)
                os.rename(draft, target)
                made.append(target)
        except OSError as error:
            raise RecordAtRisk(
                f"export to {folder}: {error.strerror or error}. Next: choose a folder that can be written"
            ) from error
    return made


def _draft(target: Path) -> Path:
    return target.with_name(target.name + ".tmp")


def _refuse_existing(target: Path) -> None:
    for taken in (target, _draft(target)):
        if taken.exists():
            raise RecordAtRisk(
                f"{taken} exists already and is never overwritten. Next: choose an empty folder"
            )


def _heading(column: schema.Column) -> str:
    return column.name if column.unit in ("", "1") else f"{column.name} [{column.unit}]"


def _write_csv(record: RecordReader, table: str, columns: tuple[schema.Column, ...], draft: Path) -> None:
    with draft.open("x", newline="", encoding="utf-8") as stream:
        writer = csv.writer(stream)
        writer.writerow([_heading(column) for column in columns])
        writer.writerows(record.rows(table))  # floats by repr: they read back bit for bit


def _arrow(path: str | Path) -> Any:
    try:
        import pyarrow as arrow  # noqa: PLC0415 - 170 MB and optional
        import pyarrow.parquet  # noqa: PLC0415
    except ImportError as error:
        raise ConfigRefused(
            "Parquet needs the package pyarrow, which is not installed",
            file=str(path),
            next_action="install trackfield[parquet], or export to csv",
        ) from error
    return arrow


def _write_parquet(
    arrow: Any, record: RecordReader, table: str, columns: tuple[schema.Column, ...], draft: Path
) -> None:
    kinds = {"INTEGER": arrow.int64(), "REAL": arrow.float64(), "TEXT": arrow.string()}
    fields = []
    for column in columns:
        told = {"unit": column.unit, "meaning": column.meaning}
        fields.append(arrow.field(column.name, kinds[column.kind.split()[0]], metadata=told))
    header = {f"trackfield.{key}": text for key, text in record.header().items()}
    layout = arrow.schema(fields, metadata=header)
    parquet_writer = arrow.parquet.ParquetWriter
    with draft.open("xb") as stream, parquet_writer(stream, layout, compression="zstd") as writer:
        for batch in _batches(record.rows(table)):
            cells = zip(*batch, strict=True)
            arrays = [arrow.array(cell, type=field.type) for cell, field in zip(cells, fields, strict=True)]
            writer.write_table(arrow.Table.from_arrays(arrays, schema=layout))


def _batches(rows: Iterator[tuple[object, ...]]) -> Iterator[list[tuple[object, ...]]]:
    while batch := list(islice(rows, BATCH_ROWS)):
        yield batch
