"""What the run's actions work with, wired once by the composition root."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from controller.config.instrument import Instrument
from controller.config.sequence import Sequence
from controller.record.store import RunRecord
from controller.route.plan import Route
from controller.safety.gateway import Gateway
from controller.safety.supervisor import Supervisor
from controller.safety.values import Action, Permit, Refusal, Trip
from drivers.clock import Clock
from drivers.contract import Detector, DeviceReplied, Integration

PATIENCE_NS = 5_000_000_000  # longer than any debounce that the instrument file may name


class Refused(Exception):
    """The guard said no to a request that the sequence needs. The run cannot go on."""

    def __init__(self, output: str, verdict: Refusal | Trip) -> None:
        super().__init__(f"{output}: {verdict.text()}")
        self.output, self.verdict = output, verdict


@dataclass(frozen=True, slots=True)
class Rig:
    """The instrument as the sequence sees it: every write goes through ``ask``."""

    clock: Clock
    supervisor: Supervisor
    gateway: Gateway
    record: RunRecord
    instrument: Instrument
    sequence: Sequence
    route: Route
    detectors: Mapping[str, Detector]

    async def ask(self, output: str, action: Action, value: float = 0.0) -> None:
        """One request to the guard. Raises Refused.

        A refusal for a condition of the cause-and-effect table is waited out for a while: within its
        debounce it either passes, or becomes the trip that ends the run under its right name.
        """
        deadline_ns = self.clock.mono_ns() + PATIENCE_NS
        while True:
            verdict = await self.gateway.request(output, action, value)
            if isinstance(verdict, Permit):
                return
            passing = isinstance(verdict, Refusal) and verdict.row
            if not passing or self.clock.mono_ns() >= deadline_ns:
                raise Refused(output, verdict)
            await self.supervisor.wait_tick()

    async def gate(self, detector: str, seconds: float) -> Integration:
        """Open a detector's gate, wait for it, fetch the result. Raises DeviceError."""
        device = self.detectors[detector]
        await device.start(seconds)
        await self.clock.sleep(seconds)
        for _ in range(5):
            try:
                return await device.collect()
            except DeviceReplied:  # the device's clock may run a little late
                await self.clock.sleep(0.01)
        return await device.collect()

    def event(self, severity: str, kind: str, text: str, **data: object) -> None:
        """Write an event of the run into the record."""
        self.record.event(self.clock.mono_ns(), severity, kind, "run", text, data or None)
