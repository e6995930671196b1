"""What goes wrong on schedule. Each kind is one entry of a table: how it begins and how it ends."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from simulator.plant import Plant
from simulator.services import ATMOSPHERE
from simulator.spec import ScheduledFault

LEAK_SECONDS = 0.5  # time constant of a pressure rise in log scale
Change = Callable[[float], None]


def _cover(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> tuple[Change, Change]:
    def both(value: float) -> Change:
        def change(t: float) -> None:
            plant.set_input(t, "cover_a", value)
            plant.set_input(t, "cover_b", value)

        return change

    return both(0.0), both(1.0)


def _emergency(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> tuple[Change, Change]:
    return (
        lambda t: plant.set_input(t, "emergency_stop", 0.0),
        lambda t: plant.set_input(t, "emergency_stop", 1.0),
    )


def _water(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> tuple[Change, Change]:
    seconds, flow = plant.spec.services.pump_seconds, plant.spec.services.flow
    return lambda t: plant.flow.go(t, 0.0, seconds), lambda t: plant.flow.go(t, flow, seconds)


def _vacuum(which: str) -> Callable[[Plant, dict[str, Any], ScheduledFault], tuple[Change, Change]]:
    def make(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> tuple[Change, Change]:
        level = plant.source_pressure if which == "source" else plant.analyser_pressure
        rest = level.rest
        return (
            lambda t: level.go(t, ATMOSPHERE, LEAK_SECONDS),
            lambda t: level.go(t, rest, 20 * LEAK_SECONDS),
        )

    return make


def _arc(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> tuple[Change, Change]:
    role = fault.role or "accelerating"
    if role not in plant.supplies:
        raise ValueError(f"fault {fault.kind!r}: {role!r} is not a high-voltage supply")
    return plant.supplies[role].arc, lambda t: None


def _deviates(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> tuple[Change, Change]:
    output = _output(plant, twins, fault)
    return lambda t: output.deviate(t, fault.size or 0.05), lambda t: output.deviate(t, 0.0)


def _stuck(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> tuple[Change, Change]:
    output = _output(plant, twins, fault)
    return lambda t: output.stick(), output.release


def _output(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> Any:
    """What has a set-point: a high-voltage supply, or the magnet's."""
    twin = _device(twins, fault)
    output = plant.supplies.get(fault.role or "", twin)
    if not hasattr(output, "deviate"):
        raise ValueError(f"fault {fault.kind!r}: {fault.role!r} is not an output with a set-point")
    return output


def _device(twins: dict[str, Any], fault: ScheduledFault) -> Any:
    if fault.role is None:
        raise ValueError(f"fault {fault.kind!r} needs a role")
    if fault.role not in twins:
        raise ValueError(f"fault {fault.kind!r}: no device has the role {fault.role!r}")
    return twins[fault.role]


def _misbehaves(word: str) -> Callable[[Plant, dict[str, Any], ScheduledFault], tuple[Change, Change]]:
    def make(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> tuple[Change, Change]:
        twin = _device(twins, fault)
        return lambda t: twin.misbehave(**{word: True}), lambda t: twin.misbehave()

    return make


KINDS: dict[str, Callable[[Plant, dict[str, Any], ScheduledFault], tuple[Change, Change]]] = {
    "cover open": _cover,
    "water lost": _water,
    "source vacuum lost": _vacuum("source"),
    "analyser vacuum lost": _vacuum("analyser"),
    "emergency stop": _emergency,
    "arc": _arc,
    "output deviates": _deviates,
    "output stuck": _stuck,
    "reading frozen": _misbehaves("frozen"),
    "reading garbled": _misbehaves("garbled"),
    "no reply": _misbehaves("silent"),
}


def schedule(plant: Plant, twins: dict[str, Any], fault: ScheduledFault) -> None:
    """Put a fault on the plant's timeline. Raises ValueError for an unknown kind or role."""
    if fault.kind not in KINDS:
        raise ValueError(f"no fault is called {fault.kind!r}; known: {', '.join(KINDS)}")
    begin, end = KINDS[fault.kind](plant, twins, fault)
    if fault.role is not None:
        _device(twins, fault)

    def logged(change: Change, word: str) -> Change:
        def act(t: float) -> None:
            plant.log.add(t, f"fault {fault.kind} {fault.role or ''} {word}".replace("  ", " "))
            change(t)

        return act

    plant.timeline.add(fault.at, logged(begin, "begins"))
    if fault.lasts is not None:
        plant.timeline.add(fault.at + fault.lasts, logged(end, "ends"))
