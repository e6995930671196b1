"""What each state does. Each action is one coroutine that ends with the event it earned.

Actions never move the machine and never hold an output's handle: they ask the guard, wait, read and
say what came of it. The conductor starts them, cancels them, and drops an outcome that comes late.
"""

from __future__ import annotations

import contextlib
from collections.abc import Awaitable, Callable

from controller.errors import ExitCode
from controller.physics.peak import peak_widths
from controller.record.journal import DetectorRow
from controller.route.forecast import CENTRING_POINTS, ELECTROMETER_SETTLES, WIDE_SPAN
from controller.route.plan import Station, Stop
from controller.run.beam import Beam
from controller.run.centring import Centre, NoPeak, ScanPoint, coarse_scan, find_centre, scan_factors
from controller.run.field import Field
from controller.run.itinerary import Itinerary, Visit
from controller.run.machine import Event, State
from controller.run.rig import Refused, Rig
from drivers.contract import Integration

ENERGY_POINTS = 21
CENTRE_GATE = 0.1  # s per point
ELECTROMETER_SETTLES_SCAN = 0.5 * ELECTROMETER_SETTLES
LATE_IN_A_ROW = 3  # stops that did not arrive before the run holds
ARRIVAL_TRIES = 2


class RunStopped(Exception):
    """The run cannot go on; it parks, and the program ends with ``exit_code``."""

    def __init__(self, message: str, exit_code: ExitCode) -> None:
        super().__init__(message)
        self.exit_code = exit_code


class Actions:
    """The actions of one run, with what they remember between states."""

    def __init__(self, rig: Rig, itinerary: Itinerary, *, on_read: Callable[[Visit], None]) -> None:
        self._rig, self._itinerary, self._on_read = rig, itinerary, on_read
        self.beam, self.field = Beam(rig), Field(rig)
        self.number = 0  # the visit under way
        self._station: Station | None = None
        self._factor: dict[str, float] = {}  # station -> calibration factor of its voltages
        self._stale_factor: set[str] = set()  # stations whose last centring failed
        self._tries = 0
        self._late = False
        self._late_row = 0
        self._gates: list[Integration] = []
        self.table: dict[State, Callable[[], Awaitable[Event]]] = {
            State.PROVING: self.prove,
            State.READY: self.start,
            State.ENERGISING: self.energise,
            State.CONDITIONING: self.condition,
            State.CENTRING: self.centre,
            State.STEPPING: self.step,
            State.SETTLING: self.settle,
            State.DWELLING: self.dwell,
            State.READING: self.read,
        }

    @property
    def visit(self) -> Visit:
        return self._itinerary[self.number]

    # --- before the sequence ---------------------------------------------------------------------

    async def prove(self) -> Event:
        """Identify the devices and read everything back; nothing is energised."""
        findings = await self._rig.supervisor.prove()
        failed = [finding for finding in findings if finding.verdict == "fail"]
        if not failed:
            return Event.PROVED
        first = failed[0]
        code = ExitCode.DEVICE_UNREACHABLE if first.unreachable else ExitCode.NOT_PERMITTED
        raise RunStopped(f"{first.role}: {first.what}: {first.text}. Next: {first.next}", code)

    async def start(self) -> Event:
        """The explicit start that the command stands for. It permits; it energises nothing."""
        self._rig.supervisor.start()
        return Event.START

    async def energise(self) -> Event:
        """Voltages to the first station's reference, detector on, ions out; the magnet at zero."""
        stop = self._reference_stop(self._rig.route.stations[0])
        await self.field.energise()
        await self.beam.energise(
            stop.accel_volts, stop.esa_volts, self._rig.instrument.counter.detector_volts
        )
        return Event.ENERGISED

    async def condition(self) -> Event:
        await self.field.condition()
        self._station = None
        return Event.CONDITIONED

    # --- centring --------------------------------------------------------------------------------

    async def centre(self) -> Event:
        """Centre every station: widely where it was never centred, finely otherwise."""
        for station in self._rig.route.stations:
            await self._enter(station)
            if not await self.field.arrive():
                self._rig.event("warning", "late", f"station {station.name}: field late before centring")
            try:
                await self._centre_station(station)
                self._stale_factor.discard(station.name)
            except NoPeak as error:
                if station.name not in self._factor:
                    raise RunStopped(
                        f"station {station.name}: no beam of {station.centre_on} found within "
                        f"+-{WIDE_SPAN:.1%} of the expected mass ({error}). Next: check the source, "
                        "the slits and the instrument file's geometry",
                        ExitCode.NOT_PERMITTED,
                    ) from error
                self._stale_factor.add(station.name)
                self._rig.event(
                    "warning", "centring", f"station {station.name}: kept the old centre: {error}"
                )
        return Event.CENTRED

    async def _centre_station(self, station: Station) -> None:
        widths = peak_widths(self._rig.instrument.geometry)
        stop = self._stop(station, station.centre_on)
        known = self._factor.get(station.name)
        if known is None:
            half_span, points = coarse_scan(self._rig.instrument.geometry, WIDE_SPAN)
            known = (await self._scan(station, stop, "wide", 1.0, half_span, points)).factor
            if self.beam.energy_trim == 0.0:
                await self._centre_energy(station, stop, known)
        centre = await self._scan(station, stop, "fine", known, 0.75 * widths.base, CENTRING_POINTS)
        self._factor[station.name] = centre.factor

    async def _scan(
        self, station: Station, stop: Stop, what: str, around: float, half_span: float, points: int
    ) -> Centre:
        """Scan the mass axis by moving both voltages; record what was found. Raises NoPeak."""
        found: list[ScanPoint] = []
        for factor in scan_factors(around, half_span, points):
            await self._voltages(stop, factor)
            found.append(ScanPoint(factor, await self._signal(stop)))
        return self._found(station, what, around, found, stop)

    async def _centre_energy(self, station: Station, stop: Stop, factor: float) -> None:
        """Scan V at fixed U across the energy slit and keep its centre as the energy trim."""
        half_span = 0.9 * peak_widths(self._rig.instrument.geometry).energy_window
        esa = stop.esa_volts * factor
        found: list[ScanPoint] = []
        for share in scan_factors(1.0, half_span, ENERGY_POINTS):
            await self.beam.move(stop.accel_volts * factor * share, esa)
            found.append(ScanPoint(share, await self._signal(stop)))
        self.beam.energy_trim = self._found(station, "energy", 1.0, found, stop).factor - 1.0

    def _found(
        self, station: Station, what: str, asked: float, points: list[ScanPoint], stop: Stop
    ) -> Centre:
        record, clock = self._rig.record, self._rig.clock
        detail = " ".join(f"{point.factor:.6f}:{point.signal:.6g}" for point in sorted(points))
        block = self.visit.block
        try:
            centre = find_centre(points, counts_per_signal=self._ions_per_signal(stop))
        except NoPeak as error:
            record.centring(
                clock.mono_ns(), station.name, block, what, asked, None, None, False, f"{error}; {detail}"
            )
            raise
        record.centring(
            clock.mono_ns(), station.name, block, what, asked, centre.factor, centre.u, True, detail
        )
        return centre

    def _ions_per_signal(self, stop: Stop) -> float:
        if stop.detector == "counter":
            return 1.0
        return 1.0 / (1.602176634e-19 * self._rig.instrument.electrometer.resistance)

    async def _signal(self, stop: Stop) -> float:
        await self._detector_settles(stop, ELECTROMETER_SETTLES_SCAN)
        return (await self._rig.gate(stop.detector, CENTRE_GATE)).total

    # --- step, settle, dwell, read ---------------------------------------------------------------

    async def step(self) -> Event:
        """Give the set-points of the present visit: field first, then voltages."""
        visit = self.visit
        await self._enter(visit.station)
        self._late = not await self._voltages(visit.stop, self._factor[visit.station.name])
        return Event.STEPPED

    async def settle(self) -> Event:
        """Wait for the field; a stop that does not arrive is retried once, then marked late."""
        if not await self.field.arrive():
            self._tries += 1
            if self._tries < ARRIVAL_TRIES:
                self._station = None  # step again, from the magnet up
                return Event.RETRY
            self._late = True
        await self._detector_settles(self.visit.stop, ELECTROMETER_SETTLES)
        self._tries = 0
        self._late_row = self._late_row + 1 if self._late else 0
        if self._late_row > LATE_IN_A_ROW:
            self._late_row = 0
            self._rig.event("warning", "late", f"{LATE_IN_A_ROW} stops in a row did not arrive: holding")
            return Event.HOLD
        return Event.SETTLED

    async def dwell(self) -> Event:
        """Integrate the beam, gate by gate."""
        stop = self.visit.stop
        self.field.start_mean()
        self._gates.clear()
        for _ in range(stop.gates):
            self._gates.append(await self._rig.gate(stop.detector, stop.dwell_seconds / stop.gates))
        return Event.DWELT

    async def read(self) -> Event:
        """Write the gates into the record and choose what comes next."""
        visit = self.visit
        flags = self._flags(visit)
        snapshot, supervisor = self._rig.supervisor.snapshot.readings, self._rig.supervisor
        accel = snapshot[supervisor.index("accelerating.volts")].value
        esa = (
            snapshot[supervisor.index("esa.outer_volts")].value
            - snapshot[supervisor.index("esa.inner_volts")].value
        )
        tesla = self.field.mean()
        for gate in self._gates:
            self._rig.record.reading(
                DetectorRow(
                    block=visit.block,
                    cycle=visit.cycle,
                    station=visit.station.name,
                    stop=visit.stop.label,
                    kind=visit.stop.kind,
                    detector=visit.stop.detector,
                    started_ns=gate.started_ns,
                    ended_ns=gate.ended_ns,
                    live_seconds=gate.live_seconds,
                    total=gate.total,
                    overrange=gate.overrange,
                    mass_to_charge=visit.stop.mass_to_charge,
                    accel_volts=accel,
                    esa_volts=esa,
                    field_tesla=tesla,
                    flags=" ".join(flags + (["overrange"] if gate.overrange else [])),
                )
            )
        self._on_read(visit)
        self.number += 1
        if self.number == self._itinerary.total:
            return Event.FINISH
        return Event.RECENTRE if self._itinerary.centre_before(self.number) else Event.NEXT

    def _flags(self, visit: Visit) -> list[str]:
        flags = []
        if self._late:
            flags.append("late")
        elif not self.field.inside():
            flags.append("off-field")
        if visit.station.name in self._stale_factor:
            flags.append("uncentred")
        return flags

    # --- shared ----------------------------------------------------------------------------------

    async def _enter(self, station: Station) -> None:
        if self._station is not station:
            self._station = None
            await self.field.go(station.name, station.field_tesla)
            self._station = station

    async def _voltages(self, stop: Stop, factor: float) -> bool:
        accel = stop.accel_volts * factor * (1.0 + self.beam.energy_trim)
        return await self.beam.move(accel, stop.esa_volts * factor)

    async def _detector_settles(self, stop: Stop, time_constants: float) -> None:
        instrument = self._rig.instrument
        if stop.detector == "counter":
            await self._rig.clock.sleep(instrument.counter.settle)
        else:
            await self._rig.clock.sleep(time_constants * instrument.electrometer.time_constant)

    def _reference_stop(self, station: Station) -> Stop:
        return self._stop(station, station.reference.label)

    @staticmethod
    def _stop(station: Station, label: str) -> Stop:
        return next(stop for stop in station.stops if stop.label == label)

    async def quiet(self) -> None:
        """End the background work (the field regulator) before parking; its own failure is past."""
        with contextlib.suppress(Refused):
            await self.field.leave()
