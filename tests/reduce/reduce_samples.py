"""Settings for the reduction's tests: an invented strontium run on the shipped bench."""

from __future__ import annotations

from pathlib import Path

from controller.config.instrument import Instrument
from controller.config.load import load_instrument
from controller.config.sequence import Sequence

BENCH = Path(__file__).parents[2] / "configs" / "bench" / "instrument.toml"

# Atomic masses in u (AME2020, as in the packages mendeleev and periodictable).
MASSES = {
    "84Sr+": 83.9134191,
    "85Rb+": 84.911789738,
    "86Sr+": 85.90926072473,
    "87Sr+": 86.90887749454,
    "87Rb+": 86.909180531,
    "88Sr+": 87.905612253,
    "206Pb+": 205.9744652,
    "208Pb+": 207.9766519,
}


def bench(
    *, dead: float = 20e-9, u_dead: float = 0.0, kind: str = "non-paralyzable", dark: float = 0.0,
    gain: float = 1.0, u_gain: float = 0.0,
) -> Instrument:  # fmt: skip
    shipped = load_instrument(str(BENCH)).settings
    dead_time = shipped.counter.dead_time.model_copy(update={"value": dead, "u": u_dead})
    counter = shipped.counter.model_copy(
        update={"dead_time": dead_time, "dead_time_kind": kind, "dark_rate": dark}
    )
    yield_ = shipped.electrometer.gain.model_copy(update={"value": gain, "u": u_gain})
    electrometer = shipped.electrometer.model_copy(
        update={"gain": yield_, "resistance": 1e11, "kelvin": 300.0}
    )
    return shipped.model_copy(update={"counter": counter, "electrometer": electrometer})


def sequence(
    *,
    ions: dict[str, float],
    ratios: list[tuple[str, str]],
    blocks: int,
    cycles: int,
    electrometer: tuple[str, ...] = (),
    **tables: object,
) -> Sequence:
    """``ions``: dwell in s by label; ``electrometer``: labels measured there."""
    return Sequence.model_validate(
        {
            "title": "test",
            "instrument": "none",
            "run": {"blocks": blocks, "cycles_per_block": cycles, "centre_every": 1},
            "ions": [
                {
                    "ion": ion,
                    "dwell": f"{dwell} s",
                    "detector": "electrometer" if ion in electrometer else "counter",
                }
                for ion, dwell in ions.items()
            ],
            "ratios": [{"numerator": n, "denominator": d} for n, d in ratios],
            **tables,
        }
    )
