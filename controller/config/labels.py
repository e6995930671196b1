"""Ion labels in settings: refused at once if no such ion exists."""

from __future__ import annotations

from typing import Annotated

from pydantic import AfterValidator

from controller.physics.ions import parse_ion


def _ion_label(label: str) -> str:
    parse_ion(label)
    return label


IonLabel = Annotated[str, AfterValidator(_ion_label)]
