"""The guard: one request, one verdict.

Theory
------
``judge`` refuses and never clamps. It knows three classes of request:

* what *lowers* (a high voltage to anything between zero and its demand, a gate shut, a supply
  disabled) is permitted in every state. The magnet lowers by set-points within its slope, and is
  disabled below its safe current only, unless the emergency stop has already taken its supply away;
* what *energises* (enable, or a higher set-point) needs no latch, a proven device, the explicit start,
  every condition whose loss would de-energise that output, and the limits: range, largest single step
  whatever the gap, slope since the last permit, joint limits;
* anything else (unknown output or action, a value that is no number) is refused.

A start (enable) asks for the permissive thresholds; a raise asks for the conditions to continue, except
detector volts, which ask for the analyser's permissive and its hold time as well. At exactly a limit the
answer is yes. Joint limits: the accelerating and ESA demands may not be raised further apart than the
envelope allows; ions are let out only when both are up; volts need the permit line closed.
"""

from __future__ import annotations

from math import isnan

from controller.safety.interlocks import HEALTHY, NS
from controller.safety.values import (
    ACCELERATING,
    DETECTOR,
    ESA,
    HIGH_VOLTAGE,
    INDEX,
    MAGNET,
    PERMIT,
    SOURCE,
    SUPPLIES,
    Action,
    Envelope,
    Latches,
    Permit,
    Refusal,
    Request,
    Snapshot,
    Trip,
    usable,
)
from drivers.contract import Reading

Answer = Permit | Refusal | Trip
LARGEST = 1e300  # beyond it arithmetic is no longer safe from infinity


def judge(envelope: Envelope, snapshot: Snapshot, latches: Latches, request: Request) -> Answer:
    """Total and pure: exactly one verdict for anything at all."""
    output = INDEX.get(request.output, -1)
    if output < 0:
        return Refusal("no such output")
    if request.action is Action.DISABLE:
        return _disable(envelope, snapshot, request.at_ns) if output == MAGNET else Permit("lowers")
    if request.action is Action.WRITE:
        value: object = request.value
        if isinstance(value, bool) or not isinstance(value, (int, float)) or not abs(value) <= LARGEST:
            return Refusal("the value is not a finite number")
        if output not in SUPPLIES:
            return Refusal("the output has no set-point", request.value)
        if lowers(latches, request):
            return _slope(envelope, latches, request) if output == MAGNET else Permit("lowers", request.value)
    elif request.action is not Action.ENABLE:
        return Refusal("no such action")
    return (
        _authority(latches, output)
        or _conditions(envelope, snapshot, latches, request)
        or (_enable if request.action is Action.ENABLE else _raise)(envelope, snapshot, latches, request)
    )


def lowers(latches: Latches, request: Request) -> bool:
    """Whether the request only takes energy away. Zero is a lowering even where nobody knows the
    demand, but for the magnet: there it would be a jump of unknown size."""
    output = INDEX.get(request.output, -1)
    if request.action is not Action.WRITE or output not in SUPPLIES:
        return request.action is Action.DISABLE
    return 0 <= request.value <= latches.demands[output] or (request.value == 0 and output != MAGNET)


def _disable(envelope: Envelope, snapshot: Snapshot, at: int) -> Answer:
    limits = envelope.outputs[MAGNET]
    status, amps = snapshot.readings[limits.status_slot], snapshot.readings[limits.read_slots[0]]
    stop = envelope.bounds[envelope.emergency_bound]
    chain = snapshot.readings[stop.slot]
    if usable(status, at, limits.stale_ns) and not int(status.value) & 1:
        return Permit("lowers")  # it is off already
    if usable(chain, at, stop.stale_ns) and chain.value < stop.trip_low:
        return Permit("the emergency stop has taken the supply away", chain.value, stop.trip_low)
    if not usable(amps, at, limits.stale_ns):
        return Refusal("the magnet's current is not known", age_ns=_age(amps, at))
    answer = Permit if abs(amps.value) <= limits.safe else Refusal
    return answer("current before disabling", amps.value, limits.safe, _age(amps, at))


def _age(reading: Reading, at: int) -> int:
    return at - reading.at_ns if reading.at_ns >= 0 else -1


def _authority(latches: Latches, output: int) -> Answer | None:
    if latches.first_out is not None:
        return Trip(f"latched by {latches.first_out.id}", row=latches.first_out.row)
    if not latches.proven[output]:
        return Refusal("the device is not proven")
    return None if latches.started else Refusal("no explicit start was given")


def _conditions(envelope: Envelope, snapshot: Snapshot, latches: Latches, request: Request) -> Answer | None:
    """The bounds that the output needs, and its own device's health."""
    output, at, start = INDEX[request.output], request.at_ns, request.action is Action.ENABLE
    limits = envelope.outputs[output]
    for number in limits.bounds:
        bound = envelope.bounds[number]
        reading = snapshot.readings[bound.slot]
        age = _age(reading, at)
        strict = start or (output == DETECTOR and number == envelope.analyser_bound)
        low, high = (bound.permit_low, bound.permit_high) if strict else (bound.trip_low, bound.trip_high)
        good = usable(reading, at, bound.stale_ns)
        if not good or not low <= reading.value <= high:
            lost = not start and (not good or not bound.trip_low <= reading.value <= bound.trip_high)
            limit = low if reading.value < low else high
            reason = f"{bound.source} (row {bound.row})" + ("" if good else " is not usable")
            answer = Trip if lost and bound.debounce_ns == 0 else Refusal
            return answer(reason, reading.value, limit, age, bound.row)
        hold = _hold_ns(envelope, number, output, start)
        held = latches.held[number]
        if hold > 0 and (held < 0 or at - held < hold):
            passed = (at - held) / NS if held >= 0 else 0.0
            return Refusal(
                f"{bound.source} (row {bound.row}) has not held long enough", passed, hold / NS, age
            )
    if limits.status_slot >= 0 and output in SUPPLIES:
        status = snapshot.readings[limits.status_slot]
        if not usable(status, at, limits.stale_ns) or status.value not in HEALTHY:
            return Refusal(f"{request.output}.status", status.value, age_ns=_age(status, at))
    return None


def _hold_ns(envelope: Envelope, number: int, output: int, start: bool) -> int:
    if output == DETECTOR and number == envelope.analyser_bound:
        return envelope.analyser_hold_ns
    return envelope.cover_hold_ns if start and number in envelope.covers else 0


def _enable(envelope: Envelope, snapshot: Snapshot, latches: Latches, request: Request) -> Answer:
    output, limits = INDEX[request.output], envelope.outputs[INDEX[request.output]]
    if output in SUPPLIES and latches.demands[output] != 0:
        return Refusal("enabled only at set-point zero", latches.demands[output], 0.0)
    if limits.set_slot >= 0:
        held = snapshot.readings[limits.set_slot]
        if not usable(held, request.at_ns, limits.stale_ns) or abs(held.value) > limits.safe:
            age = _age(held, request.at_ns)
            return Refusal("the device does not hold set-point zero", held.value, limits.safe, age)
    if output in (*HIGH_VOLTAGE, SOURCE) and not latches.enabled[PERMIT]:
        return Refusal("the permit line is open")
    for needed in (ACCELERATING, ESA) if output == SOURCE else ():
        if not (latches.enabled[needed] and latches.demands[needed] > 0):
            return Refusal("ions are let out only when accelerating and ESA volts are up", 0.0)
    return Permit("permitted")


def _raise(envelope: Envelope, snapshot: Snapshot, latches: Latches, request: Request) -> Answer:
    output, value, limits = INDEX[request.output], request.value, envelope.outputs[INDEX[request.output]]
    if not latches.enabled[output]:
        return Refusal("raised only when enabled", value)
    if not 0 <= value <= limits.maximum:
        return Refusal("outside the limits", value, limits.maximum)
    answer = _slope(envelope, latches, request)
    if isinstance(answer, Permit) and output in (ACCELERATING, ESA):
        accel = value if output == ACCELERATING else latches.demands[ACCELERATING]
        esa = value if output == ESA else latches.demands[ESA]
        apart = abs(esa - envelope.esa_ratio * accel)
        if not apart <= envelope.esa_part_volts:
            return Refusal("ESA and accelerating volts too far apart", apart, envelope.esa_part_volts)
    return answer


def _slope(envelope: Envelope, latches: Latches, request: Request) -> Answer:
    """Step and slope from the last permitted value, compared as ``demand + room`` so that who
    computes its set-point in that way is never refused for a rounding."""
    output, value, limits = INDEX[request.output], request.value, envelope.outputs[INDEX[request.output]]
    demand, since = latches.demands[output], latches.permitted_ns[output]
    if isnan(demand):
        return Refusal("nobody knows the present set-point", value)
    if not demand - limits.step <= value <= demand + limits.step:
        return Refusal("step too large", abs(value - demand), limits.step)
    room = limits.per_second * ((request.at_ns - since) / NS) if since >= 0 else limits.step
    if not demand - room <= value <= demand + room:
        return Refusal("slope too steep since the last permit", abs(value - demand), room)
    return Permit("permitted", value, limits.maximum)


def granted(latches: Latches, request: Request) -> Latches:
    """The latches after a permitted request."""
    output, action = INDEX[request.output], request.action
    demands, enabled, since = list(latches.demands), list(latches.enabled), list(latches.permitted_ns)
    if action is Action.WRITE:
        demands[output] = request.value
    else:
        enabled[output] = action is Action.ENABLE
        demands[output] = float(action is Action.ENABLE and output not in SUPPLIES)
    if action is not Action.ENABLE:
        since[output] = request.at_ns
    return latches._replace(demands=tuple(demands), enabled=tuple(enabled), permitted_ns=tuple(since))
