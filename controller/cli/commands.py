"""The commands: arguments in, documented exit code out, one clear line for every refusal."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import wraps
from pathlib import Path
from typing import Any

import click

from controller.errors import ExitCode, TrackfieldError

SEQUENCE = click.argument("sequence", type=click.Path(path_type=str))
JSON = click.option("--json", "as_json", is_flag=True, help="One JSON object instead of text.")
INSTRUMENT = click.option("--instrument", help="Instrument file, in place of the sequence file's.")
SAMPLE = click.option(
    "--sample", help="Sample file (simulated instruments), in place of the sequence file's."
)
RECORD = click.option(
    "--record", help="Path of the record. Never overwritten. Default: runs/<title>-<n>.sqlite"
)
SEED = click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Hidden truths.")


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="trackfield", prog_name="trackfield")
def trackfield() -> None:
    """Rehearse, run, record and reduce acquisitions on a magnetic-sector mass spectrometer.

    This program is not a safety system. Read the cautions in README.md before you connect anything.
    """


def invoke(arguments: Sequence[str]) -> int:
    """Run one command line and return its exit code. No traceback for any bad input."""
    try:
        code = trackfield.main(args=list(arguments), prog_name="trackfield", standalone_mode=False)
    except click.exceptions.Exit as leaving:
        return leaving.exit_code
    except click.ClickException as wrong:
        wrong.show()
        return ExitCode.USAGE
    except click.Abort:
        click.echo("interrupted before anything was energised", err=True)
        return ExitCode.STOPPED
    except TrackfieldError as refused:
        click.echo(str(refused), err=True)
        return refused.exit_code
    except OSError as failed:
        click.echo(f"{failed.strerror or failed}: {failed.filename or ''}", err=True)
        return ExitCode.INTERNAL_FAULT
    return code if isinstance(code, int) else ExitCode.DONE


def _command(function: Callable[..., Any]) -> Callable[..., Any]:
    """Adds --json and hands the command a screen."""

    @JSON
    @wraps(function)
    def inner(as_json: bool, **options: Any) -> Any:
        from controller.cli.screen import Screen  # noqa: PLC0415

        return function(screen=Screen(as_json=as_json), **options)

    return inner


@trackfield.command()
@SEQUENCE
@INSTRUMENT
@SAMPLE
@_command
def check(screen: Any, sequence: str, instrument: str | None, sample: str | None) -> int:
    """Prove the set-up: files, route, devices, limits, interlocks. Touches no output."""
    from controller.cli.checking import check_job  # noqa: PLC0415
    from controller.cli.job import load_job  # noqa: PLC0415

    job = load_job(sequence, instrument=instrument, sample=sample, simulated=False)
    return check_job(job, screen)


@trackfield.command()
@SEQUENCE
@INSTRUMENT
@_command
def forecast(screen: Any, sequence: str, instrument: str | None) -> int:
    """Stations, stops, dwells, dead time, expected counts and uncertainties, without running."""
    from controller.cli.checking import forecast_job  # noqa: PLC0415
    from controller.cli.job import load_job  # noqa: PLC0415

    return forecast_job(load_job(sequence, instrument=instrument, simulated=False), screen)


@trackfield.command()
@SEQUENCE
@INSTRUMENT
@SAMPLE
@click.option("--faults", help="Faults file: what goes wrong, and when.")
@RECORD
@SEED
@_command
def rehearse(
    screen: Any,
    sequence: str,
    instrument: str | None,
    sample: str | None,
    faults: str | None,
    record: str | None,
    seed: int,
) -> int:
    """Run the whole sequence against the simulator, in virtual time."""
    from controller.cli.job import load_job  # noqa: PLC0415
    from controller.cli.reporting import run_job  # noqa: PLC0415

    job = load_job(sequence, instrument=instrument, sample=sample, faults=faults, simulated=True)
    return run_job(job, record=record, seed=seed, virtual=True, screen=screen)


@trackfield.command()
@SEQUENCE
@INSTRUMENT
@SAMPLE
@RECORD
@SEED
@_command
def run(
    screen: Any,
    sequence: str,
    instrument: str | None,
    sample: str | None,
    record: str | None,
    seed: int,
) -> int:
    """Run the sequence in real time on the devices that the instrument file names."""
    from controller.cli.job import load_job  # noqa: PLC0415
    from controller.cli.reporting import run_job  # noqa: PLC0415

    job = load_job(sequence, instrument=instrument, sample=sample, simulated=False)
    return run_job(job, record=record, seed=seed, virtual=False, screen=screen)


@trackfield.command()
@click.argument("record", type=click.Path(path_type=str))
@_command
def reduce(screen: Any, record: str) -> int:
    """Counts to ratios with uncertainties, from the record alone."""
    from controller.cli.reporting import reduce_and_show  # noqa: PLC0415

    return reduce_and_show(Path(record), screen)


@trackfield.command()
@click.argument("record", type=click.Path(path_type=str))
@click.option("--to", type=click.Choice(["csv", "parquet"]), default="csv", show_default=True)
@click.option("--into", "folder", help="Folder for the files. Default: the record's name without suffix.")
@_command
def export(screen: Any, record: str, to: str, folder: str | None) -> int:
    """Write every table of a record as files with units in their heads."""
    from controller.record.export import export as write  # noqa: PLC0415

    into = Path(folder) if folder else Path(record).with_suffix("")
    files = write(record, to=to, out_dir=into)  # type: ignore[arg-type]
    for file in files:
        screen.say(str(file))
    screen.result({"files": [str(file) for file in files]})
    return ExitCode.DONE
