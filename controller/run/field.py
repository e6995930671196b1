"""The magnet's field at a station: a ramp to the best guess, then the probe closes the loop.

The field asked for is not the field obtained: hysteresis makes the current for a field depend on the
path, and eddy currents make the field follow the current late. So a move has two parts. The ramp goes
to the current at which this station was last held (or, the first time, to the empirical field law's).
Then the regulator, the only owner of the correction, integrates the probe's error into the current and
goes on doing so during the dwell, because the slow eddy mode outlives the arrival.

Arrival is proven by the probe: inside the window for the hold time, on readings that are good and
fresh.
"""

from __future__ import annotations

import asyncio
import math
from typing import NamedTuple

from controller.physics.magnet_model import MagnetModel
from controller.run.rig import Rig
from controller.safety.values import Action
from drivers.clock import NS
from drivers.contract import Quality

# Gain of the integrator per probe reading, of the error expressed as current. One would be dead beat
# without lag; the eddy modes lend about 3 % of each step late, so half is fast and does not ring
# (chosen on the simulated plant; common practice, no source).
GAIN = 0.5
# Inside the window the error is averaged over about this many readings before it is acted on, and left
# alone below this part of the window, so that the probe's noise is not written to the magnet.
READINGS_AVERAGED = 3
DEAD_BAND = 0.3
# Inside the window every second reading is enough; once the field has stayed there for longer than the
# slowest eddy mode lives, every fourth.
INSIDE_READINGS = 2
CALM_SECONDS = 3.0
CALM_READINGS = 4
AFTER_TICK_NS = 1_000_000


class FieldState(NamedTuple):
    """What the regulator knows of the field: ``error`` is (probe - target) / target."""

    error: float
    inside_since_ns: int  # -1 while outside the window
    at_ns: int


class Field:
    """The magnet as the sequence uses it."""

    def __init__(self, rig: Rig) -> None:
        self._rig = rig
        settings = rig.instrument.magnet
        self._settings = settings
        self._model = MagnetModel(settings)
        self._probe = rig.supervisor.index("probe.tesla")
        self.amps = 0.0
        self._amps_at_ns = 0
        self._target = 0.0
        self._regulator: asyncio.Task[None] | None = None
        self._held: dict[str, float] = {}  # station -> current at the end of its last visit
        self._station = ""
        self.state = FieldState(math.inf, -1, -1)
        self._sum, self._count = 0.0, 0

    async def energise(self) -> None:
        """Enable the supply at zero current. Raises Refused."""
        await self._rig.ask("magnet", Action.ENABLE)

    async def condition(self) -> None:
        """Cycle between zero and full current so that the magnet's history is known. Raises Refused."""
        await self.leave()
        for _ in range(self._settings.conditioning_cycles):
            for amps in (self._settings.amps_max, 0.0):
                await self._ramp(amps)
                await self._rig.clock.sleep(self._settings.conditioning_dwell)
        self._held.clear()

    async def go(self, station: str, tesla: float) -> None:
        """Ramp towards a station's field and leave the regulator in charge. Raises Refused."""
        await self.leave()
        self._station, self._target = station, tesla
        guess = self._held.get(station)
        await self._ramp(guess if guess is not None else self._model.amps_for_tesla(tesla))
        self.state = FieldState(math.inf, -1, -1)
        self._regulator = asyncio.create_task(self._regulate(), name="field regulator")

    async def leave(self) -> None:
        """Stop regulating; remember the current for the next visit."""
        if self._regulator is None:
            return
        task, self._regulator = self._regulator, None
        arrived = self.state.inside_since_ns >= 0
        task.cancel()
        try:
            await task
        except asyncio.CancelledError:
            if (own := asyncio.current_task()) is not None and own.cancelling():
                raise
        if arrived:
            self._held[self._station] = self.amps

    async def arrive(self) -> bool:
        """Wait until the field has stayed inside its window for the hold time.

        Returns False at the time-out. Raises what the regulator raised (Refused).
        """
        hold_ns = round(self._settings.field_hold * NS)
        deadline = self._rig.clock.mono_ns() + round(self._settings.field_timeout * NS)
        while True:
            self._raise_regulator_failure()
            now, state = self._rig.clock.mono_ns(), self.state
            if state.inside_since_ns >= 0 and state.at_ns - state.inside_since_ns >= hold_ns:
                return True
            if now >= deadline:
                return False
            await self._rig.supervisor.wait_tick()

    def inside(self) -> bool:
        """Whether the last probe reading lies inside the window."""
        self._raise_regulator_failure()
        return self.state.inside_since_ns >= 0

    def start_mean(self) -> None:
        """Begin the mean of the probe over a dwell."""
        self._sum, self._count = 0.0, 0

    def mean(self) -> float:
        """Mean probe reading since ``start_mean`` in T; nan where none was heard."""
        return self._sum / self._count if self._count else math.nan

    async def _ramp(self, target: float) -> None:
        settings, rig = self._settings, self._rig
        slope = settings.amps_per_second_max * (1 - 1e-6)
        while self.amps != target:
            await rig.supervisor.wait_tick()
            now = rig.clock.mono_ns()
            room = min(slope * (now - self._amps_at_ns) / NS, settings.step_amps_max)
            gap = target - self.amps
            await self._write(target if abs(gap) <= room else self.amps + math.copysign(room, gap))

    async def _write(self, amps: float) -> None:
        await self._rig.ask("magnet", Action.WRITE, amps)
        self.amps, self._amps_at_ns = amps, self._rig.clock.mono_ns()

    async def _regulate(self) -> None:
        rig, settings, target = self._rig, self._settings, self._target
        window = settings.field_window
        amps_per_tesla = 1.0 / self._model.tesla_per_amp(self.amps)
        heard_ns, smooth = rig.clock.mono_ns(), 0.0
        period_ns = round(rig.instrument.devices.probe.poll * NS)
        calm_ns = round(CALM_SECONDS * NS)
        while True:
            reading = rig.supervisor.snapshot.readings[self._probe]
            if reading.at_ns <= heard_ns or reading.quality is not Quality.GOOD:
                await rig.supervisor.wait_tick()
                continue
            heard_ns = reading.at_ns
            error = (reading.value - target) / target
            self._sum += reading.value
            self._count += 1
            since = self.state.inside_since_ns
            if abs(error) > window:
                since = -1
            elif since < 0:
                since = heard_ns
            self.state = FieldState(error, since, heard_ns)
            if since < 0:
                smooth = 0.0
                await self._trim(-GAIN * error * target * amps_per_tesla)
            else:
                smooth += (error - smooth) / READINGS_AVERAGED
                if abs(smooth) > DEAD_BAND * window:
                    await self._trim(-smooth * target * amps_per_tesla)
                    smooth = 0.0
            # straight to the tick that will have heard the probe again; a field that has arrived and
            # stayed is looked at less often
            readings = 1 if since < 0 else CALM_READINGS if heard_ns - since > calm_ns else INSIDE_READINGS
            await rig.clock.sleep_until_ns(heard_ns + readings * period_ns + AFTER_TICK_NS)

    async def _trim(self, step: float) -> None:
        settings = self._settings
        room = settings.amps_per_second_max * (1 - 1e-6) * (self._rig.clock.mono_ns() - self._amps_at_ns) / NS
        room = min(room, settings.step_amps_max)
        step = max(-room, min(room, step))
        amps = min(max(self.amps + step, 0.0), settings.amps_max)
        resolution = settings.set_point_resolution
        if abs(amps - self.amps) >= 0.5 * resolution:
            await self._write(amps)

    def _raise_regulator_failure(self) -> None:
        task = self._regulator
        if task is not None and task.done() and not task.cancelled():
            error = task.exception()
            if error is not None:
                raise error
