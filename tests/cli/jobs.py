"""Small jobs for the tests: the shipped demo files, cut down, in a folder of their own."""

from __future__ import annotations

import re
from pathlib import Path

CONFIGS = Path(__file__).parents[2] / "configs"


def small_job(
    folder: Path,
    *,
    demo: str = "strontium",
    blocks: int = 1,
    cycles: int = 3,
    replace: dict[str, str] | None = None,
    instrument: dict[str, str] | None = None,
    sample: dict[str, str] | None = None,
) -> Path:
    """Copies of a demo's files with a shorter run; ``replace`` changes texts. The sequence's path."""
    names = {
        "instrument.toml": CONFIGS / "bench" / "instrument.toml",
        "sample.toml": CONFIGS / demo / "sample.toml",
    }
    changes = {"instrument.toml": instrument or {}, "sample.toml": sample or {}}
    for name, source in names.items():
        (folder / name).write_text(
            changed(source.read_text(encoding="utf-8"), changes[name]), encoding="utf-8"
        )
    text = (CONFIGS / demo / "sequence.toml").read_text(encoding="utf-8")
    text = re.sub(r"^blocks = \d+", f"blocks = {blocks}", text, flags=re.M)
    text = re.sub(r"^cycles_per_block = \d+", f"cycles_per_block = {cycles}", text, flags=re.M)
    text = re.sub(r'^instrument = ".*"', 'instrument = "instrument.toml"', text, flags=re.M)
    text = re.sub(r'^sample = ".*"', 'sample = "sample.toml"', text, flags=re.M)
    path = folder / "sequence.toml"
    path.write_text(changed(text, replace or {}), encoding="utf-8")
    return path


def changed(text: str, changes: dict[str, str]) -> str:
    for old, new in changes.items():
        assert old in text, f"{old!r} is not in the file: the test would change nothing"
        text = text.replace(old, new)
    return text


def faults(folder: Path, *lines: str) -> Path:
    """A faults file from TOML tables."""
    path = folder / "faults.toml"
    path.write_text("\n".join(f"[[faults]]\n{line}" for line in lines) + "\n", encoding="utf-8")
    return path
