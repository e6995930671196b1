"""The faults file: what goes wrong, and when, in a rehearsal."""

from __future__ import annotations

from typing import Literal, Self

from pydantic import Field, model_validator

from controller.config.instrument import Devices
from controller.config.units import FaultAt, Number, Seconds, Settings

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
SUPPLIES = ("accelerating", "esa", "detector")
ROLES = tuple(Devices.model_fields)
# the roles that a kind may name; a kind that is not here takes none
ROLES_OF: dict[str, tuple[str, ...]] = {
    "arc": SUPPLIES,
    "output deviates": ("magnet", *SUPPLIES),
    "output stuck": ("magnet", *SUPPLIES),
    "reading frozen": ROLES,
    "reading garbled": ROLES,
    "no reply": ROLES,
}


class FaultSettings(Settings):
    kind: FaultKind
    at: Seconds = Field(ge=0)
    role: str | None = None  # device concerned, where the kind needs one; an arc's default: accelerating
    lasts: Seconds | None = Field(default=None, gt=0)  # for ever if absent
    size: Number | None = Field(default=None, ge=-1, le=1)  # of a deviation, fraction of the set-point

    @model_validator(mode="after")
    def _goes_with_its_kind(self) -> Self:
        roles = ROLES_OF.get(self.kind, ())
        if self.role is None and roles and self.kind != "arc":
            raise FaultAt(f"{self.kind!r} needs a role: one of {', '.join(roles)}", "role")
        if self.role is not None and self.role not in roles:
            choice = f"one of {', '.join(roles)}" if roles else "none"
            raise FaultAt(f"{self.kind!r} takes another role: {choice}", "role")
        if self.size is not None and self.kind != "output deviates":
            raise FaultAt(f"{self.kind!r} has no size", "size")
        if self.size == 0:
            raise FaultAt("a deviation of nothing is no fault", "size")
        return self


class Faults(Settings):
    faults: tuple[FaultSettings, ...] = Field(min_length=1)
