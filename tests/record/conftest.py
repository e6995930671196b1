"""Makers of small records."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest
from record_samples import CHANNELS, HEADER

from controller.record.store import RunRecord


@pytest.fixture
def make(tmp_path: Path) -> Callable[..., RunRecord]:
    def begin(name: str = "run.sqlite", *, virtual: bool = True, **more: object) -> RunRecord:
        return RunRecord.create(
            tmp_path / name,
            header=HEADER._replace(virtual=virtual),
            channels=CHANNELS,
            durability="process" if virtual else "full",
            **more,
        )

    return begin
