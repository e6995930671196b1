"""A reduction from the record alone: the rows and the files as they were, nothing else."""

from __future__ import annotations

from pathlib import Path

from controller.config.load import parse_instrument, parse_sequence
from controller.physics.ions import parse_ion
from controller.record.reader import RecordReader
from controller.reduce.pipeline import reduce_rows
from controller.reduce.result import Reduction


def reduce_record(path: str | Path) -> Reduction:
    """Reduce a finished or still growing record. Raises ConfigRefused."""
    with RecordReader(path) as record:
        sequence, instrument = record.file("sequence"), record.file("instrument")
        return reduce_rows(
            record.readings(),
            parse_sequence(sequence.text, sequence.name),
            parse_instrument(instrument.text, instrument.name),
            lambda label: parse_ion(label).neutral_u,
        )
