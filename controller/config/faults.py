"""The faults file: what goes wrong, and when, in a rehearsal."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from controller.config.units import Seconds, Settings

FaultKind = Literal[
    "cover open",
    "water lost",
    "source vacuum lost",
    "analyser vacuum lost",
    "emergency stop",
    "arc",
    "output deviates",
    "output stuck",
    "reading frozen",
    "reading garbled",
    "no reply",
]


class FaultSettings(Settings):
    kind: FaultKind
    at: Seconds = Field(ge=0)
    role: str | None = None  # device concerned, where the kind needs one
    lasts: Seconds | None = Field(default=None, gt=0)  # for ever if absent
    size: float | None = None  # fraction, where the kind has one


class Faults(Settings):
    faults: tuple[FaultSettings, ...] = Field(min_length=1)
