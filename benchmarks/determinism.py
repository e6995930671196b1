"""Equal files and seed make equal records, row for row, also under another hash seed."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
from pathlib import Path

from benchmarks.figure import Figure
from controller.record.reader import equal_rows

SEQUENCE = Path(__file__).parents[1] / "configs" / "lead-thorium-uranium" / "sequence.toml"


def _record(path: Path, *, seed: int, hash_seed: str) -> Path:
    subprocess.run(
        [sys.executable, "-m", "controller", "rehearse", str(SEQUENCE), "--record", str(path),
         "--seed", str(seed), "--json"],
        check=True, capture_output=True, env={**os.environ, "PYTHONHASHSEED": hash_seed},
    )  # fmt: skip
    return path


def measure() -> list[Figure]:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        first = _record(folder / "a.sqlite", seed=1, hash_seed="1")
        again = _record(folder / "b.sqlite", seed=1, hash_seed="2")
        other = _record(folder / "c.sqlite", seed=2, hash_seed="1")
        same, differs = equal_rows(first, again), equal_rows(first, other)
    return [
        Figure(
            "determinism of a rehearsal",
            "equal row for row" if same is None else str(same),
            "other seed: " + ("differs" if differs is not None else "EQUAL"),
            "-",
            "equal; another seed differs",
            same is None and differs is not None,
            "two processes, PYTHONHASHSEED 1 and 2",
        )
    ]
