"""The command as its user meets it: exit codes, one clear line, nothing overwritten, nothing lost."""

from __future__ import annotations

import json
import os
import re
import signal
import sqlite3
import subprocess
import sys
import time
from pathlib import Path

import pytest
from jobs import CONFIGS, faults, small_job

from controller.cli.commands import invoke, trackfield
from controller.errors import ExitCode
from controller.record.reader import RecordReader, equal_rows, verify

README = Path(__file__).parents[2] / "README.md"


def run(*arguments: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "controller", *arguments],
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
        env={**os.environ, **environment},
    )


def test_a_rehearsal_prints_a_banner_the_ratios_and_the_truth(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    record = tmp_path / "run.sqlite"
    assert invoke(["rehearse", str(small_job(tmp_path)), "--record", str(record)]) == 0
    text = capsys.readouterr().out
    assert text.startswith("SIMULATION")
    for word in ("87Sr+/86Sr+", "truth", "diff/u", "PARKED", "times faster than real", str(record)):
        assert word in text
    assert "\t" not in text
    again = tmp_path / "again"
    assert invoke(["reduce", str(record)]) == 0
    table = capsys.readouterr().out
    assert [line for line in text.splitlines() if line.startswith("87Sr+")] == [
        line for line in table.splitlines() if line.startswith("87Sr+")
    ]
    assert invoke(["export", str(record), "--into", str(again)]) == 0
    assert "unit" in (again / "columns.csv").read_text(encoding="utf-8")
    assert invoke(["export", str(record), "--to", "parquet", "--into", str(tmp_path / "arrow")]) == 0
    assert list((tmp_path / "arrow").glob("*.parquet"))


@pytest.mark.parametrize("command", ["check", "forecast", "rehearse"])
def test_every_command_speaks_json(tmp_path: Path, command: str, capsys: pytest.CaptureFixture[str]) -> None:
    more = ["--record", str(tmp_path / "run.sqlite")] if command == "rehearse" else []
    assert invoke([command, str(small_job(tmp_path)), "--json", *more]) == 0
    data = json.loads(capsys.readouterr().out)
    assert data


def test_check_energises_nothing_and_says_ready(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert invoke(["check", str(small_job(tmp_path))]) == 0
    text = capsys.readouterr().out
    assert "READY: nothing was energised" in text
    assert "FAIL" not in text


def test_equal_files_and_seed_make_equal_records_under_any_hash_seed(tmp_path: Path) -> None:
    job = str(small_job(tmp_path, demo="lead-thorium-uranium", cycles=2))
    names = {"a": ("7", "1"), "b": ("7", "2"), "c": ("8", "1")}
    for name, (seed, hash_seed) in names.items():
        record = str(tmp_path / f"{name}.sqlite")
        done = run("rehearse", job, "--record", record, "--seed", seed, PYTHONHASHSEED=hash_seed)
        assert done.returncode == 0, done.stderr
    assert equal_rows(tmp_path / "a.sqlite", tmp_path / "b.sqlite") is None
    assert equal_rows(tmp_path / "a.sqlite", tmp_path / "c.sqlite") is not None


BAD = [
    ({"ions": '[[ions]]\nion = "84Sr+"', "to": '[[ions]]\nion = "84Xx+"'}, 3, "84Xx"),
    ({"ions": 'dwell = "4 s"', "to": 'dwell = "4 V"'}, 3, "is not a quantity in s"),
    ({"ions": "blocks = 1\n", "to": "blokcs = 1\n"}, 3, "did you mean 'blocks'"),
    ({"ions": "[[ratios]]", "to": "[[ratios]"}, 3, "is not TOML"),
    ({"ions": 'ion = "85Rb+"', "to": 'ion = "7Li+"'}, 3, "7Li+"),
    ({"ions": 'mass_to_charge = "83.5 u"', "to": 'mass_to_charge = "40.0 u"'}, 3, "outside the voltage span"),
]


@pytest.mark.parametrize(("change", "code", "says"), BAD)
def test_bad_input_is_one_clear_line_and_touches_nothing(
    tmp_path: Path, change: dict[str, str], code: int, says: str
) -> None:
    job = small_job(tmp_path, replace={change["ions"]: change["to"]})
    record = tmp_path / "run.sqlite"
    done = run("rehearse", str(job), "--record", str(record))
    assert done.returncode == code
    assert says in done.stderr
    assert "Traceback" not in done.stderr
    assert len(done.stderr.strip().splitlines()) == 1
    assert "Next:" in done.stderr
    assert not record.exists()


def test_a_limit_that_the_magnet_cannot_reach_names_key_value_and_limit(tmp_path: Path) -> None:
    job = small_job(tmp_path, instrument={'field_max = "0.9 T"': 'field_max = "0.3 T"'})
    done = run("check", str(job))
    assert done.returncode == 3
    for part in ("ions[0].ion", "84Sr+", "0.3 T", "Next:"):
        assert part in done.stderr


@pytest.mark.parametrize(
    ("arguments", "code"),
    [
        (["rehearse", "no-such-file.toml"], 3),
        (["reduce", "no-such-record.sqlite"], 3),
        (["reduce", str(CONFIGS / "bench" / "instrument.toml")], 3),
        (["rehearse"], 2),
        (["rehearse", "x", "--seed", "minus one"], 2),
        (["fly"], 2),
    ],
)
def test_wrong_command_lines_have_the_documented_codes(arguments: list[str], code: int) -> None:
    done = run(*arguments)
    assert done.returncode == code
    assert "Traceback" not in done.stderr


def test_an_existing_record_is_never_overwritten(tmp_path: Path) -> None:
    record = tmp_path / "run.sqlite"
    record.write_bytes(b"somebody's work")
    done = run("rehearse", str(small_job(tmp_path)), "--record", str(record))
    assert done.returncode == ExitCode.RECORD_AT_RISK
    assert "never overwritten" in done.stderr
    assert record.read_bytes() == b"somebody's work"


def test_a_record_that_cannot_be_made_is_said(tmp_path: Path) -> None:
    done = run("rehearse", str(small_job(tmp_path)), "--record", str(tmp_path / "no" / "such" / "r.sqlite"))
    assert done.returncode == ExitCode.RECORD_AT_RISK
    assert "Traceback" not in done.stderr


def test_a_full_disk_parks_and_says_record_at_risk(tmp_path: Path) -> None:
    """A limit on the size of files stands in for a full disk: the write itself fails (EFBIG)."""
    job = small_job(tmp_path, cycles=40)
    code = (
        "import resource, signal, sys\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (600_000, 600_000))\n"
        "from controller.cli.commands import invoke\n"
        "sys.exit(invoke(sys.argv[1:]))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, "rehearse", str(job), "--record", str(tmp_path / "r.sqlite")],
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == ExitCode.RECORD_AT_RISK, done.stderr
    assert "Traceback" not in done.stderr


def test_a_trip_has_its_code_and_its_first_out_line(tmp_path: Path) -> None:
    schedule = faults(tmp_path, 'kind = "cover open"\nat = "120 s"')
    done = run(
        "rehearse", str(small_job(tmp_path, cycles=20)), "--faults", str(schedule),
        "--record", str(tmp_path / "r.sqlite"),
    )  # fmt: skip
    assert done.returncode == ExitCode.TRIPPED
    assert "COVER OPEN (row 1)" in done.stderr
    assert "Next:" in done.stderr
    assert verify(tmp_path / "r.sqlite") == []


def _started(tmp_path: Path, command: str, cycles: int, **more: dict[str, str]) -> subprocess.Popen[str]:
    job = small_job(tmp_path, cycles=cycles, **more)
    return subprocess.Popen(
        [sys.executable, "-m", "controller", command, str(job), "--record", str(tmp_path / "r.sqlite")],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def _wait_for_rows(path: Path, table: str, count: int) -> None:
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline:
        try:
            with sqlite3.connect(f"file:{path}?mode=ro", uri=True) as connection:
                (found,) = connection.execute(f"SELECT count(*) FROM {table}").fetchone()
            if found >= count:
                return
        except sqlite3.Error:
            pass
        time.sleep(0.02)
    raise AssertionError(f"{table} never had {count} rows")


def test_ctrl_c_parks_the_outputs_and_a_second_one_does_not_hurt(tmp_path: Path) -> None:
    child = _started(tmp_path, "rehearse", 4000)
    _wait_for_rows(tmp_path / "r.sqlite", "readings", 50)
    child.send_signal(signal.SIGINT)
    child.send_signal(signal.SIGINT)
    out, err = child.communicate(timeout=60)
    assert child.returncode == ExitCode.STOPPED, err
    assert "Parking" in err
    assert "Traceback" not in err
    assert "read back off" in out
    with RecordReader(tmp_path / "r.sqlite") as record:
        assert [str(row[0]) for row in record.rows("states", "target")][-2:] == ["parking", "parked"]


def test_kill_9_loses_no_committed_reading(tmp_path: Path) -> None:
    child = _started(tmp_path, "rehearse", 4000)
    path = tmp_path / "r.sqlite"
    _wait_for_rows(path, "readings", 60)
    with sqlite3.connect(f"file:{path}?mode=ro", uri=True) as connection:
        before = connection.execute("SELECT * FROM readings ORDER BY rowid").fetchall()
    child.kill()
    child.communicate(timeout=60)
    assert [problem for problem in verify(path) if "without closing" not in problem] == []
    with sqlite3.connect(path) as connection:
        after = connection.execute("SELECT * FROM readings ORDER BY rowid").fetchall()
    assert after[: len(before)] == before
    assert len(after) >= len(before) >= 60
    assert invoke(["reduce", str(path)]) == 0


def test_hold_and_resume_by_signal_centre_again_and_repeat_the_stop(tmp_path: Path) -> None:
    child = _started(tmp_path, "rehearse", 4000)
    path = tmp_path / "r.sqlite"
    _wait_for_rows(path, "readings", 30)
    child.send_signal(signal.SIGUSR1)
    _wait_for_rows(path, "states WHERE target = 'holding'", 1)
    child.send_signal(signal.SIGUSR2)
    _wait_for_rows(path, "states WHERE event = 'resume'", 1)
    time.sleep(0.5)
    child.send_signal(signal.SIGINT)
    _, err = child.communicate(timeout=60)
    assert child.returncode == ExitCode.STOPPED, err
    with RecordReader(path) as record:
        moves = [tuple(str(cell) for cell in row) for row in record.rows("states", "source, event, target")]
        rows = [(row.block, row.cycle, row.stop) for row in record.readings() if row.live_seconds < 1.5]
    held = next(i for i, move in enumerate(moves) if move[2] == "holding")
    assert moves[held + 1] == ("holding", "resume", "centring")
    assert moves[held + 2] == ("centring", "centred", "stepping")
    single = [row for row in rows if row[2] == "88Sr+"]
    assert len(single) == len(set(single))  # nothing was measured twice


QUICK = {
    'detector_vacuum_hold = "60 s"': 'detector_vacuum_hold = "1 s"',
    'cover_hold = "5 s"': 'cover_hold = "1 s"',
    "conditioning_cycles = 3": "conditioning_cycles = 0",
    'settle_before_parked = "10 s"': 'settle_before_parked = "1 s"',
}


def test_run_goes_the_same_way_in_real_time_until_it_is_stopped(tmp_path: Path) -> None:
    child = _started(tmp_path, "run", 400, instrument=QUICK)
    path = tmp_path / "r.sqlite"
    _wait_for_rows(path, "centrings", 1)
    child.send_signal(signal.SIGTERM)
    _, err = child.communicate(timeout=90)
    assert child.returncode == ExitCode.STOPPED, err
    with RecordReader(path) as record:
        header = record.header()
        ticks = [int(str(row[0])) for row in record.rows("telemetry", "at_ns")]
    assert header["virtual"] == "no"
    assert header["durability"].startswith("full")
    assert ticks[-1] / 1e9 > 5  # it took real seconds
    assert verify(path) == []


def test_the_exit_codes_of_the_readme_are_those_of_the_code() -> None:
    rows = re.findall(r"^\| (\d+) \| ", README.read_text(encoding="utf-8"), flags=re.M)
    assert [int(code) for code in rows] == [int(code) for code in ExitCode]


def test_every_command_is_in_the_readme_and_has_help() -> None:
    text = README.read_text(encoding="utf-8")
    for name, command in trackfield.commands.items():
        assert f"`trackfield {name}" in text
        assert command.help
