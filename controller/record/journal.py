"""What the rest of the controller may say to a record. The SQLite writer is in ``store.py``."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import NamedTuple, Protocol


class DetectorRow(NamedTuple):
    """One gate of one stop as it goes into the record and as the reduction reads it back."""

    block: int
    cycle: int
    station: str
    stop: str  # label of the ion or name of the background position
    kind: str  # "ion" | "background" | "centring"
    detector: str  # "counter" | "electrometer"
    started_ns: int
    ended_ns: int
    live_seconds: float
    total: float  # pulses, or volt-seconds
    overrange: bool
    mass_to_charge: float  # u per charge, asked for
    accel_volts: float  # read back
    esa_volts: float  # read back, outer minus inner
    field_tesla: float  # probe, mean over the dwell
    flags: str  # space-separated marks, "" when clean: "late", "trip", "overrange", ...


class Journal(Protocol):
    """Append-only. All methods but ``durable`` return at once; none raises on a full disk: the
    writer remembers the failure in ``fault`` and the supervisor's next tick reads it (row 13)."""

    @property
    def fault(self) -> str | None: ...

    def telemetry(self, tick: int, at_ns: int, values: Sequence[float | None], notes: str | None) -> None:
        """One tick. ``values`` follow the channel list given at creation; None where nothing new was
        heard (NaN means the same and is ten times cheaper to store). ``tick`` counts up by one.
        ``notes`` is JSON for anything unusual (quality not good, heard at another time)."""

    def request(
        self,
        at_ns: int,
        output: str,
        action: str,
        value: float | None,
        verdict: str,
        reason: str,
        measured: float | None,
        limit: float | None,
        age_ns: int | None,
    ) -> None:
        """One request to the guard with its verdict ("permit", "refusal", "trip")."""

    def state(self, at_ns: int, source: str, event: str, target: str) -> None:
        """One transition of the state machine."""

    def event(
        self,
        at_ns: int,
        severity: str,
        kind: str,
        source: str,
        text: str,
        data: Mapping[str, object] | None = None,
    ) -> None:
        """Anything a person should find later: severity "info" | "warning" | "trip"."""

    def reading(self, row: DetectorRow) -> None:
        """One gate of the detector."""

    async def durable(self) -> None:
        """Return when everything said so far is committed. Raises RecordAtRisk."""
