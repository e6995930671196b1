"""The safe state: the order of getting there, what counts as proof, and the way back.

Theory
------
SAFE means: commanded off, read back off, plausibly decayed, no rebound seen. It never means "safe to
touch". A read-back that falls faster than its bleeder allows is a failed sensor, not a safe output;
one that falls slower has lost its bleeder. What was not seen is not confirmed, and is said so.

The procedure is data (``STEPS``); ``parking.py`` walks it and asks the judgements below, which know
samples and limits and nothing of how they came. A sample is (at_ns, value) of a usable reading heard
after the output was switched off, in order of time.
"""

from __future__ import annotations

from math import log
from typing import NamedTuple

from controller.safety.interlocks import NS, PRIORITY, TABLE
from controller.safety.values import Cause, Envelope, Latches, OutputLimits, Refusal, Snapshot, usable


class Step(NamedTuple):
    """One step: what is done, what confirms it, by when, and what follows if it is not confirmed."""

    name: str
    confirm: str
    deadline_seconds: float  # 0: computed from the envelope
    otherwise: str


STEPS: tuple[Step, ...] = (
    Step("latch", "the guard refuses all that energises", 0.05, "none"),
    Step("stop ions", "source gate reads shut", 0.5, "continue and note"),
    Step("fire all", "each device acknowledges", 0.4, "send three times, then drop the permit line"),
    Step("command truth", "set-points read zero, outputs read disabled", 1.0, "drop the permit line"),
    Step(
        "volts truth", "three fresh samples below the safe volts, decay plausible", 0, "row 19, unconfirmed"
    ),
    Step("amps truth", "three fresh samples below the safe current, then disabled", 0, "unconfirmed"),
    Step("dwell", "nothing rises again", 0, "back to the truths, once"),
    Step("open permit", "the line's echo reads open", 1.0, "row 1b, unconfirmed"),
    Step("say", "record committed", 5.0, "never blocks the steps before it"),
)
SAMPLES = 3  # fresh ones in a row
OBSERVABLE = 4.0  # a decay is judged when it begins this many times above the safe value
CLEAR_FALL = 1.5  # and by its rate when it was seen to fall by this factor
TOLERANCE = 2.0  # either way, on the expected decay constant

Samples = tuple[tuple[int, float], ...]


def settled(limits: OutputLimits, samples: Samples) -> bool:
    """The last three samples are below the safe value."""
    return len(samples) >= SAMPLES and all(abs(value) <= limits.safe for _, value in samples[-SAMPLES:])


def implausible(limits: OutputLimits, samples: Samples) -> str:
    """Why the decay in ``samples`` cannot be the bleeder's; "" if it can, or none was observable."""
    if not samples or abs(samples[0][1]) <= OBSERVABLE * limits.safe:
        return ""
    start_ns, start = samples[0][0], abs(samples[0][1])
    above = [sample for sample in samples if abs(sample[1]) > limits.safe]
    last_ns, last = above[-1][0], abs(above[-1][1])
    expected = limits.decay_seconds
    if start / last >= CLEAR_FALL:
        found = (last_ns - start_ns) / NS / log(start / last)
        if found > TOLERANCE * expected:
            return f"decays with {found:.3g} s where {expected:.3g} s is expected: bleeder open?"
    elif len(above) < len(samples):  # fell between two samples: only an upper bound is known
        end_ns = samples[len(above)][0]
        found = (end_ns - start_ns) / NS / log(start / limits.safe)
    else:
        return ""
    if found < expected / TOLERANCE:
        return f"decays with {found:.3g} s where {expected:.3g} s is expected: sensor failed?"
    return ""


def deadline_seconds(limits: OutputLimits) -> float:
    """How long an output may take from its maximum to the safe value before it is unconfirmed."""
    return max(5.0, log(limits.maximum / limits.safe)) * limits.decay_seconds + 10.0


def ramp_seconds(limits: OutputLimits, demand: float) -> float:
    """How long a ramp from ``demand`` to zero may take, acknowledgements included."""
    return 1.5 * abs(demand) / limits.per_second + 10.0


def unknown(latches: Latches, causes: tuple[Cause, ...]) -> tuple[Cause, ...]:
    """The causes that are not latched yet, once each."""
    known = {cause.id for cause in latches.causes}
    return tuple({cause.id: cause for cause in reversed(causes) if cause.id not in known}.values())[::-1]


def latch(latches: Latches, causes: tuple[Cause, ...]) -> Latches:
    """Take new causes in: the first-out is frozen, later ones are listed once each, the start is lost."""
    new = tuple(cause for cause in unknown(latches, causes) if TABLE[cause.row].latched)
    if not new:
        return latches
    first = latches.first_out or min(new, key=lambda cause: PRIORITY[cause.row])
    return latches._replace(first_out=first, causes=latches.causes + new, started=False, confirmed=False)


def judge_reset(
    envelope: Envelope, snapshot: Snapshot, latches: Latches, present: tuple[Cause, ...], first_out: str
) -> Latches | Refusal:
    """A person's reset naming the first-out: it permits, it changes no output, and it needs the safe
    state confirmed and every latched cause gone for its time."""
    at = snapshot.at_ns
    if latches.first_out is None:
        return Refusal("nothing is latched")
    if first_out != latches.first_out.id:
        return Refusal(f"the first-out is {latches.first_out.id}, not {first_out}")
    if not latches.confirmed:
        return Refusal("the safe state is not confirmed")
    if present:
        return Refusal(f"{present[0].id} is still present")
    for cause in latches.causes:
        needed = TABLE[cause.row].reset_seconds
        gone = (at - cause.at_ns) / NS
        for number, bound in enumerate(envelope.bounds):
            if bound.source == cause.source:
                held = latches.held[number]
                needed = max(needed, TABLE[bound.row].reset_seconds)
                gone = (at - held) / NS if held >= 0 else -1.0
                if not usable(snapshot.readings[bound.slot], at, bound.stale_ns):
                    gone = -1.0
        if gone < needed:
            return Refusal(f"{cause.id} has not been gone for long enough", max(gone, 0.0), needed)
    return latches._replace(first_out=None, causes=())
