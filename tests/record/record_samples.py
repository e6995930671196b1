"""Small records with known contents, also for child processes."""

from __future__ import annotations

from controller.record.journal import DetectorRow
from controller.record.store import RecordHeader, RunRecord
from drivers.contract import Channel

CHANNELS = (Channel("magnet.amps", "A"), Channel("probe.tesla", "T"), Channel("esa.outer_volts", "V"))
HEADER = RecordHeader(title="demo", instrument="bench", mode="SIMULATION", virtual=True, seed=7)


def reading(number: int) -> DetectorRow:
    return DetectorRow(
        block=0,
        cycle=number,
        station="lead",
        stop="208Pb+",
        kind="ion",
        detector="counter",
        started_ns=number * 1_000_000_000,
        ended_ns=number * 1_000_000_000 + 500_000_000,
        live_seconds=0.5,
        total=1000.0 + number,
        overrange=number % 2 == 1,
        mass_to_charge=207.9761,
        accel_volts=8000.1,
        esa_volts=960.1,
        field_tesla=0.1 + number / 3,
        flags="late" if number == 2 else "",
    )


def fill(record: RunRecord, rows: int = 5) -> None:
    """A little of everything."""
    record.file("sequence", "sequence.toml", 'title = "demo"\n')
    for tick in range(rows):
        record.telemetry(tick, tick * 50_000_000, [1.5 * tick, None, float("nan")], None)
        record.reading(reading(tick))
    record.request(10, "accelerating", "write", 8000.0, "refusal", "slope", 9000.0, 8100.0, 40)
    record.request(11, "source", "disable", None, "permit", "de-energising", None, None, None)
    record.state(20, "parked", "prove", "proving")
    record.event(30, "warning", "late", "run", "stop was late", {"b": 2, "a": [1, "x"]})
    record.centring(40, "lead", 0, "fine", 1.0, None, None, False, "no peak; 1:2")
    record.truth("208Pb+/206Pb+", 2.1681)
