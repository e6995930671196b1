"""Errors by who must act, and the exit code that each one ends the program with.

Device errors (wiring, device) live with the device contract; everything a person meets ends here.
Each message names the value, the limit and the next action.
"""

from __future__ import annotations

from enum import IntEnum


class ExitCode(IntEnum):
    """What a wrapper script may rely on. The README's table is compared with this by a test."""

    DONE = 0
    USAGE = 2
    CONFIG_REFUSED = 3
    NOT_PERMITTED = 4
    TRIPPED = 5
    PARKED_UNCONFIRMED = 6
    RECORD_AT_RISK = 7
    DEVICE_UNREACHABLE = 8
    INSTRUMENT_HELD = 9
    STOPPED = 10
    REPLAY_DIFFERS = 11
    INTERNAL_FAULT = 70


class TrackfieldError(Exception):
    """A failure with a message fit for a person and an exit code fit for a script."""

    exit_code: ExitCode = ExitCode.INTERNAL_FAULT


class ConfigRefused(TrackfieldError):
    """A file is wrong. The operator must correct it; nothing was energised."""

    exit_code = ExitCode.CONFIG_REFUSED

    def __init__(
        self,
        problem: str,
        *,
        file: str,
        line: int | None = None,
        key: str | None = None,
        value: object = None,
        limit: str | None = None,
        next_action: str,
    ) -> None:
        self.problem, self.file, self.line, self.key = problem, file, line, key
        self.value, self.limit, self.next_action = value, limit, next_action
        where = file + (f", line {line}" if line is not None else "")
        parts = [f"CONFIG REFUSED {where}"]
        if key:
            parts.append(f"key {key}" + (f" = {value!r}" if value is not None else ""))
        parts.append(problem)
        if limit:
            parts.append(f"limit: {limit}")
        super().__init__("; ".join(parts) + f". Next: {next_action}")


class NotPermitted(TrackfieldError):
    """A permissive is missing at start. The operator or the plant must act."""

    exit_code = ExitCode.NOT_PERMITTED


class DeviceUnreachable(TrackfieldError):
    """A device did not answer, or is not the one named. Look at the wiring."""

    exit_code = ExitCode.DEVICE_UNREACHABLE


class RecordAtRisk(TrackfieldError):
    """The record cannot be written, or would overwrite another."""

    exit_code = ExitCode.RECORD_AT_RISK


class Defect(TrackfieldError):
    """The program contradicts itself. The programmer must act."""
