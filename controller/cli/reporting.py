"""``rehearse``, ``run`` and ``reduce``: from a job to the table that a person reads."""

from __future__ import annotations

import re
from pathlib import Path

from controller.cli.checking import banner, forecast_of, show_forecast
from controller.cli.job import Job
from controller.cli.screen import Screen, duration
from controller.cli.session import Ended, conduct
from controller.errors import ExitCode, RecordAtRisk
from controller.record.reader import RecordReader
from controller.reduce.from_record import reduce_record
from controller.reduce.result import Reduction
from controller.report.table import ratio_table

RUNS = Path("runs")


def run_job(job: Job, *, record: str | None, seed: int, virtual: bool, screen: Screen) -> int:
    """Conduct a job, show its ratios, and return the exit code. Raises TrackfieldError."""
    banner(job, screen)
    path = Path(record) if record else _free_path(job.sequence.settings.title)
    show_forecast(job, forecast_of(job), screen)
    screen.say(f"record: {path}" + (f", seed {seed}" if job.sample is not None else ""))
    screen.say()
    ended = conduct(job, record=path, seed=seed, virtual=virtual, screen=screen)
    _show_end(ended, virtual, screen)
    truth: dict[str, float] = {}
    if ended.reduction is not None:
        truth = _truth(path)
        screen.say()
        screen.say(ratio_table(ended.reduction, truth or None))
        _show_verdict(ended.reduction, truth, screen)
    screen.result(_data(ended, truth))
    return ended.outcome.exit_code


def reduce_and_show(record: Path, screen: Screen) -> int:
    """Reduce a record again and show the table. Raises ConfigRefused."""
    reduction = reduce_record(record)
    with RecordReader(record) as reader:
        header = reader.header()
        truth = reader.truth()
    screen.say(f"{header['mode']}: {header['title']} on {header['instrument']}")
    screen.say(ratio_table(reduction, truth or None))
    _show_verdict(reduction, truth, screen)
    screen.result({"ratios": _ratios(reduction, truth), "notes": list(reduction.notes)})
    return ExitCode.DONE


def _free_path(title: str) -> Path:
    """The first free name under ``runs/`` for a title."""
    try:
        RUNS.mkdir(exist_ok=True)
    except OSError as error:
        raise RecordAtRisk(
            f"folder {RUNS}: cannot be made: {error.strerror}. Next: name a --record path"
        ) from error
    stem = re.sub(r"[^a-z0-9]+", "-", title.lower()).strip("-")[:60] or "run"
    number = 1
    while (path := RUNS / f"{stem}-{number}.sqlite").exists():
        number += 1
    return path


def _truth(path: Path) -> dict[str, float]:
    with RecordReader(path) as reader:
        return {name: value for name, value in reader.truth().items() if not name.startswith("hidden.")}


def _show_end(ended: Ended, virtual: bool, screen: Screen) -> None:
    outcome = ended.outcome
    line = f"{outcome.state.value.upper()}: {outcome.reason}"
    if outcome.exit_code is ExitCode.DONE:
        screen.say(line)
    else:
        screen.complain(f"{line} (exit code {int(outcome.exit_code)})")
    if ended.parking:
        screen.say(f"outputs: {ended.parking}")
    took = f"{duration(ended.simulated_seconds)} of instrument time"
    if virtual:
        speed = ended.simulated_seconds / ended.real_seconds
        took += f" rehearsed in {ended.real_seconds:.1f} s ({speed:.0f} times faster than real)"
    screen.say(f"{took}; {ended.ticks} ticks of the guard; record {ended.record}")


def _show_verdict(reduction: Reduction, truth: dict[str, float], screen: Screen) -> None:
    """In a rehearsal the truth is known: say how many of the 95 % intervals hold it."""
    known = [result for result in reduction.results if result.name in truth]
    if not known:
        return
    inside = sum(abs(result.value - truth[result.name]) <= result.expanded for result in known)
    screen.say(
        f"truth inside the 95 % interval: {inside} of {len(known)} ratios "
        "(one in twenty falls outside by design)"
    )


def _ratios(reduction: Reduction, truth: dict[str, float]) -> list[dict[str, object]]:
    return [{**result.as_json(), "truth": truth.get(result.name)} for result in reduction.results]


def _data(ended: Ended, truth: dict[str, float]) -> dict[str, object]:
    return {
        "state": ended.outcome.state.value,
        "exit_code": int(ended.outcome.exit_code),
        "reason": ended.outcome.reason,
        "outputs": ended.parking,
        "record": str(ended.record),
        "simulated_seconds": ended.simulated_seconds,
        "real_seconds": ended.real_seconds,
        "ticks": ended.ticks,
        "ratios": _ratios(ended.reduction, truth) if ended.reduction is not None else [],
    }
