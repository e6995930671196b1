"""Small sequences for the tests of the route."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from controller.config.instrument import Instrument
from controller.config.load import load_instrument
from controller.config.sequence import Sequence

CONFIGS = Path(__file__).parents[2] / "configs"
POOL = [
    f"{nuclide}+"
    for nuclide in (
        *("39K", "56Fe", "63Cu", "65Cu", "85Rb", "87Sr", "88Sr", "90Zr"),
        *("96Zr", "129Xe", "132Xe", "136Xe", "204Pb", "208Pb", "232Th", "238U"),
    )
]


def bench(**sections: dict[str, Any]) -> Instrument:
    """The shipped instrument with some values of some sections changed."""
    instrument = load_instrument(str(CONFIGS / "bench" / "instrument.toml")).settings
    changed = {name: getattr(instrument, name).model_copy(update=update) for name, update in sections.items()}
    return instrument.model_copy(update=changed)


def sequence(*labels: str, **more: object) -> Sequence:
    ions = [{"ion": label, "dwell": "1 s", "expected_rate": 1e4} for label in labels]
    base: dict[str, object] = {
        "title": "t",
        "instrument": "i",
        "run": {"blocks": 1, "cycles_per_block": 1, "centre_every": 1},
        "ions": ions,
        "ratios": [{"numerator": labels[0], "denominator": labels[-1]}],
    }
    return Sequence.model_validate({**base, **more})
