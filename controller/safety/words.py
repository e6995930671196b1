"""The words of the cause-and-effect table: what a person reads, and what to do next.

Kept out of the kernel, which decides by row and never by text. A test compares the ids.
"""

from __future__ import annotations

from controller.safety.values import Cause, said

# row -> (what has happened, the next action)
WORDS: dict[str, tuple[str, str]] = {
    "11": ("EMERGENCY STOP", "release it on the spot"),
    "1": ("COVER OPEN", "shut the cover; residual energy: do not touch"),
    "1b": ("INTERLOCK FAULT", "exercise both channels, look for a welded relay"),
    "2": ("WATER LOST", "look at the pump; leave the water on"),
    "3": ("COIL TEMPERATURE", "look for the flow, let the coil cool"),
    "4a": ("SOURCE VACUUM", "look at the pumps and the gauge"),
    "4b": ("ANALYSER VACUUM", "look at the pumps and the gauge"),
    "5": ("ARC OR OVER-CURRENT", "look at the supply that is named"),
    "6a": ("DEVIATION, read-back below demand", "let the supply test itself"),
    "6b": ("UNCOMMANDED OUTPUT, read-back above demand", "go there; isolate the supply"),
    "7": ("COMMUNICATION LOST, output state UNKNOWN", "look at the line"),
    "8": ("STALE SENSOR, treated as bad", "look at the sensor"),
    "9": ("BAD REPLY, treated as the worst", "look at the line"),
    "10": ("DETECTOR", "lower the beam, look at the detector"),
    "12a": ("STOPPING", "wait"),
    "12b": ("INTERNAL FAULT", "read the report, tell the maker"),
    "13": ("RECORD AT RISK", "make room on the disk"),
    "15b": ("PAUSED", "find what stopped the program"),
    "17": ("FOUND ENERGISED", "find who energised it"),
    "18": ("CONTROL TAKEN at the device", "give it back to remote control"),
    "19": ("SAFE NOT CONFIRMED", "go by the local procedure; it may be live"),
    "20": ("ON BATTERY", "wait for the mains"),
}


def describe(cause: Cause) -> str:
    """The first-out line: words, row, where, value against limit, what to do next."""
    says, then = WORDS[cause.row]
    found = said(cause.source, cause.value, cause.limit, cause.age_ns)
    detail = f" ({cause.detail})" if cause.detail else ""
    return f"TRIP {says} (row {cause.row}): {found}{detail}. Next: {then}"
