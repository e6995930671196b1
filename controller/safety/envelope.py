"""The envelope from the instrument file: every limit that the kernel compares with, built once.

Delays that the instrument file does not hold are literal here, each with the row of the
cause-and-effect table that asks for it. They are starting proposals, as the table's are.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import inf

from controller.config.instrument import DeviceSettings, HighVoltageSettings, Instrument
from controller.errors import Defect
from controller.physics.fields import tracking_ratio
from controller.safety.interlocks import TABLE
from controller.safety.values import (
    ACCELERATING,
    DETECTOR,
    ESA,
    MAGNET,
    PERMIT,
    SOURCE,
    Bound,
    Envelope,
    OutputLimits,
    TrackLimits,
)
from drivers.contract import Channel

NS = 1_000_000_000

COIL_MARGIN_KELVIN = 15.0  # row 3: cooler than the trip by this much before a start
COIL_DEBOUNCE = 1.0  # row 3
MAINS_DEBOUNCE = 5.0  # row 20
MAGNET_DEVIATION_AFTER = 2.0  # row 6a, ramping
ABOVE_AFTER = 0.1  # row 6b: 200 ms, of which a poll and a tick are needed to see it
GATE_WINDOW = 0.2  # a relay and its echo
ESA_PART_FRACTION = 0.02  # of the largest ESA volts: trims and scans part the pair by less


def build_envelope(instrument: Instrument, channels: Sequence[Channel]) -> Envelope:
    """The limits of ``instrument`` for snapshots whose readings follow ``channels``.

    Raises Defect where a channel that a limit needs is offered by no driver.
    """
    return _Builder(instrument, tuple(channel.name for channel in channels)).build()


class _Builder:
    def __init__(self, instrument: Instrument, names: tuple[str, ...]) -> None:
        self._instrument, self._names = instrument, names
        self._slots = {name: slot for slot, name in enumerate(names)}

    def _slot(self, name: str) -> int:
        if name not in self._slots:
            raise Defect(f"no driver offers the channel {name}, which the guard needs")
        return self._slots[name]

    def _stale(self, name: str) -> int:
        device: DeviceSettings = getattr(self._instrument.devices, name.partition(".")[0])
        return round(device.stale_after * NS)

    def build(self) -> Envelope:
        instrument = self._instrument
        bounds = self._bounds()
        numbers = {bound.source: number for number, bound in enumerate(bounds)}
        statuses = tuple(
            (name, self._slot(name), self._stale(name))
            for name in ("accelerating.status", "esa.status", "magnet.status", "detector.status")
        )
        ratio = tracking_ratio(instrument.geometry) * (1.0 + instrument.esa.tracking_trim)
        step = max(ratio * instrument.accelerating.step_volts_max, instrument.esa.step_volts_max)
        interlocks = instrument.interlocks
        return Envelope(
            channels=self._names,
            outputs=self._outputs(bounds),
            bounds=bounds,
            tracks=self._tracks(),
            statuses=statuses,
            checks=tuple((b.slot, b.permit_low, b.permit_high, b.stale_ns) for b in bounds),
            status_slots=tuple(slot for _, slot, _ in statuses),
            covers=(numbers["interlocks.cover_a"], numbers["interlocks.cover_b"]),
            disagree_ns=round(interlocks.channel_disagreement * NS),
            esa_ratio=ratio,
            esa_part_volts=step + ESA_PART_FRACTION * instrument.esa.volts_max,
            analyser_bound=numbers["analyser_gauge.pascals"],
            analyser_hold_ns=round(interlocks.detector_vacuum_hold * NS),
            cover_hold_ns=round(interlocks.cover_hold * NS),
            emergency_bound=numbers["interlocks.emergency_stop"],
        )

    # --- bounds ----------------------------------------------------------------------------------

    def _bounds(self) -> tuple[Bound, ...]:
        instrument, interlocks = self._instrument, self._instrument.interlocks
        water, coil = interlocks.water, instrument.magnet.coil_kelvin_trip
        source, analyser = interlocks.source_vacuum, interlocks.analyser_vacuum
        healthy = (1.0, 1.0)
        high = self._high
        return (
            self._bound("interlocks.emergency_stop", "11", healthy, healthy, 0.0),
            self._bound("interlocks.cover_a", "1", healthy, healthy, 0.0),
            self._bound("interlocks.cover_b", "1", healthy, healthy, 0.0),
            self._bound("water.flow", "2", (water.permit, inf), (water.trip, inf), water.debounce),
            self._bound("water.switch", "2", healthy, healthy, water.debounce),
            self._bound("interlocks.thermostat", "3", healthy, healthy, COIL_DEBOUNCE),
            high("magnet.coil_kelvin", "3", coil - COIL_MARGIN_KELVIN, coil, COIL_DEBOUNCE),
            high("source_gauge.pascals", "4a", source.permit, source.trip, 0.0),
            high("analyser_gauge.pascals", "4b", analyser.permit, analyser.trip, 0.0),
            *(
                high(f"{role}.amps", "5", settings.current_max, settings.current_max, 0.0)
                for role, settings in self._supplies()
            ),
            # no limits of their own; what cannot be heard acts as the row that it serves: over-range
            # that nobody sees, and the second witness of the magnet
            self._bound("counter.rate", "10", (-inf, inf), (-inf, inf), 0.0),
            self._bound("electrometer.volts", "10", (-inf, inf), (-inf, inf), 0.0),
            self._bound("probe.tesla", "6a", (-inf, inf), (-inf, inf), 0.0),
            self._bound("interlocks.mains", "20", healthy, healthy, MAINS_DEBOUNCE),
        )

    def _supplies(self) -> tuple[tuple[str, HighVoltageSettings], ...]:
        instrument = self._instrument
        return (
            ("accelerating", instrument.accelerating),
            ("esa", instrument.esa),
            ("detector", instrument.detector),
        )

    def _high(self, name: str, row: str, permit: float, trip: float, debounce: float) -> Bound:
        return self._bound(name, row, (-inf, permit), (-inf, trip), debounce)

    def _bound(
        self, name: str, row: str, permit: tuple[float, float], trip: tuple[float, float], debounce: float
    ) -> Bound:
        return Bound(name, row, self._slot(name), *permit, *trip, self._stale(name), round(debounce * NS))

    # --- tracks ----------------------------------------------------------------------------------

    def _tracks(self) -> tuple[TrackLimits, ...]:
        instrument, esa = self._instrument, self._instrument.esa
        return (
            self._volts("accelerating.volts", ACCELERATING, 1.0, instrument.accelerating),
            # half of the pair's volts on each plate, so that one plate alone is judged too
            self._volts("esa.outer_volts", ESA, 2.0, esa),
            self._volts("esa.inner_volts", ESA, -2.0, esa),
            self._magnet(),
            self._volts("detector.volts", DETECTOR, 1.0, instrument.detector),
            self._gate("source.open", SOURCE, "6a", "6b"),
            self._gate("permit.echo", PERMIT, "1b", "1b"),
        )

    def _volts(self, name: str, output: int, scale: float, settings: HighVoltageSettings) -> TrackLimits:
        after = settings.deviation_after
        return TrackLimits(
            source=name,
            output=output,
            slot=self._slot(name),
            scale=scale,
            band=settings.deviation,
            band_fraction=settings.deviation_fraction,
            window_ns=round(after / 2 * NS),
            below_ns=round(after / 2 * NS),
            above_ns=round(ABOVE_AFTER * NS),
            decay_ns=2.0 * settings.bleed_seconds * NS,
            fall_per_ns=0.5 * settings.volts_per_second_max / NS,
            stale_ns=self._stale(name),
            below_row="6a",
            above_row="6b",
        )

    def _magnet(self) -> TrackLimits:
        settings = self._instrument.magnet
        name = "magnet.amps"
        return TrackLimits(
            source=name,
            output=MAGNET,
            slot=self._slot(name),
            scale=1.0,
            band=settings.deviation,
            band_fraction=0.0,
            window_ns=round(MAGNET_DEVIATION_AFTER / 2 * NS),
            below_ns=round(MAGNET_DEVIATION_AFTER / 2 * NS),
            above_ns=round(MAGNET_DEVIATION_AFTER / 2 * NS),
            decay_ns=2.0 * settings.inductance / settings.resistance * NS,
            fall_per_ns=0.5 * settings.amps_per_second_max / NS,
            stale_ns=self._stale(name),
            below_row="6a",
            above_row="6b",
        )

    def _gate(self, name: str, output: int, below: str, above: str) -> TrackLimits:
        window = round(GATE_WINDOW * NS)
        return TrackLimits(
            name, output, self._slot(name), 1.0, 0.5, 0.0, window, window, window, 0.0, 0.0,
            self._stale(name), below, above,
        )  # fmt: skip

    # --- outputs ---------------------------------------------------------------------------------

    def _outputs(self, bounds: tuple[Bound, ...]) -> tuple[OutputLimits, ...]:
        instrument, magnet = self._instrument, self._instrument.magnet
        needs = [
            tuple(number for number, bound in enumerate(bounds) if TABLE[bound.row].effects[output] > 0)
            for output in range(PERMIT)
        ]
        return (
            self._supply("accelerating", ("volts",), instrument.accelerating, needs[ACCELERATING]),
            self._supply("esa", ("outer_volts", "inner_volts"), instrument.esa, needs[ESA]),
            OutputLimits(
                maximum=magnet.amps_max,
                per_second=magnet.amps_per_second_max,
                step=magnet.step_amps_max,
                safe=magnet.safe_amps,
                decay_seconds=magnet.inductance / magnet.resistance,
                read_slots=(self._slot("magnet.amps"),),
                set_slot=self._slot("magnet.set_amps"),
                status_slot=self._slot("magnet.status"),
                stale_ns=self._stale("magnet.amps"),
                bounds=needs[MAGNET],
            ),
            self._supply("detector", ("volts",), instrument.detector, needs[DETECTOR]),
            self._gate_limits("source.open", self._slot("source.status"), needs[SOURCE]),
            # the permit line carries high voltage and source: it needs what accelerating volts need
            self._gate_limits("permit.echo", -1, needs[ACCELERATING]),
        )

    def _supply(
        self, role: str, reads: tuple[str, ...], settings: HighVoltageSettings, bounds: tuple[int, ...]
    ) -> OutputLimits:
        return OutputLimits(
            maximum=settings.volts_max,
            per_second=settings.volts_per_second_max,
            step=settings.step_volts_max,
            safe=settings.safe_volts,
            decay_seconds=settings.bleed_seconds,
            read_slots=tuple(self._slot(f"{role}.{read}") for read in reads),
            set_slot=self._slot(f"{role}.set_volts"),
            status_slot=self._slot(f"{role}.status"),
            stale_ns=self._stale(role),
            bounds=bounds,
        )

    def _gate_limits(self, read: str, status_slot: int, bounds: tuple[int, ...]) -> OutputLimits:
        return OutputLimits(
            1.0, inf, 1.0, 0.5, 0.0, (self._slot(read),), -1, status_slot, self._stale(read), bounds
        )
