"""The accelerating voltage and the ESA: energised in order, and moved together.

A jump to another mass at a fixed field is a pair of set-points, V and U = k V. Where the guard's step
limit is smaller than the jump, the pair is walked there in equal stages, so that the two never part
by more than one step.
"""

from __future__ import annotations

import math

from controller.config.instrument import HighVoltageSettings
from controller.run.rig import Rig
from controller.safety.values import Action
from drivers.clock import NS

# A stage waits this much longer than the slope asks, so that rounding never makes a refusal.
MARGIN = 1.0 + 1e-6
# ... and a stage is this much smaller than the largest step, for the same reason.
STEP_SHARE = 1.0 - 1e-9
ARRIVAL_TICKS = 40  # after this many ticks outside the band a jump is late


class Beam:
    """Accelerating volts, ESA volts, detector volts and the source gate, in SI."""

    def __init__(self, rig: Rig) -> None:
        self._rig = rig
        self._settings: dict[str, HighVoltageSettings] = {
            "accelerating": rig.instrument.accelerating,
            "esa": rig.instrument.esa,
            "detector": rig.instrument.detector,
        }
        self.set_volts = {"accelerating": 0.0, "esa": 0.0, "detector": 0.0}
        self._set_at_ns = {"accelerating": 0, "esa": 0, "detector": 0}
        # Energy trim: V = (U / k)(1 + trim), found once by centring the beam in the energy slit.
        self.energy_trim = 0.0

    async def energise(self, accel_volts: float, esa_volts: float, detector_volts: float) -> None:
        """Bring up ESA and accelerating volts, then the detector, then let ions out of the source.

        The order keeps ions off a powered detector until the optics pass only what is asked for.
        Raises Refused.
        """
        for output in ("esa", "accelerating"):
            await self._rig.ask(output, Action.ENABLE)
        await self.move(accel_volts, esa_volts)
        await self._rig.ask("detector", Action.ENABLE)
        await self._walk({"detector": detector_volts})
        await self._arrive("detector")
        await self._rig.ask("source", Action.ENABLE)

    async def move(self, accel_volts: float, esa_volts: float) -> bool:
        """Move the pair and wait until both read back inside their bands.

        Returns False where a read-back has not arrived in time (the stop is then marked late).
        Raises Refused.
        """
        before = self.set_volts["accelerating"], self.set_volts["esa"]
        await self._walk({"accelerating": accel_volts, "esa": esa_volts})
        slew = max(
            abs(accel_volts - before[0]) / self._settings["accelerating"].volts_per_second_max,
            abs(esa_volts - before[1]) / self._settings["esa"].volts_per_second_max,
        )
        if slew > 0:
            # the walk already took the upward slope's time; the downward one may still be under way
            settle = max(self._settings["accelerating"].settle, self._settings["esa"].settle)
            await self._rig.clock.sleep(settle)
        return await self._arrive("accelerating") and await self._arrive("esa")

    async def _walk(self, targets: dict[str, float]) -> None:
        starts = {output: self.set_volts[output] for output in targets}
        stages = 1
        for output, target in targets.items():
            step = self._settings[output].step_volts_max * STEP_SHARE
            stages = max(stages, math.ceil(abs(target - starts[output]) / step))
        for stage in range(1, stages + 1):
            share = stage / stages
            for output, target in targets.items():
                value = target if stage == stages else starts[output] + share * (target - starts[output])
                await self._set(output, value)

    async def _set(self, output: str, value: float) -> None:
        rise = value - self.set_volts[output]
        if rise == 0:
            return
        if rise > 0:
            needed = rise / self._settings[output].volts_per_second_max * MARGIN
            spent = (self._rig.clock.mono_ns() - self._set_at_ns[output]) / NS
            if needed > spent:
                await self._rig.clock.sleep(needed - spent)
        await self._rig.ask(output, Action.WRITE, value)
        self.set_volts[output] = value
        self._set_at_ns[output] = self._rig.clock.mono_ns()

    async def _arrive(self, output: str) -> bool:
        """Wait for a reading taken after the last set-point that lies inside the deviation band."""
        rig, settings = self._rig, self._settings[output]
        target, since = self.set_volts[output], self._set_at_ns[output]
        band = max(settings.deviation, settings.deviation_fraction * abs(target))
        channel = rig.supervisor.index(f"{output}.volts" if output != "esa" else "esa.outer_volts")
        inner = rig.supervisor.index("esa.inner_volts")
        for _ in range(ARRIVAL_TICKS):
            reading = rig.supervisor.snapshot.readings[channel]
            volts = reading.value
            if output == "esa":
                volts -= rig.supervisor.snapshot.readings[inner].value
            if reading.quality == 0 and reading.at_ns > since and abs(volts - target) <= band:
                return True
            await rig.supervisor.wait_tick()
        return False
