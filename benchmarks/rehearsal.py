"""Rehearsing 1 h and 8 h of acquisition: speed against real time, memory, cost per simulated hour.

Each rehearsal is a process of its own, pinned to one core where the system allows it, so that its
peak memory is its own and nothing runs beside it.
"""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import NamedTuple

from benchmarks.figure import Figure

CONFIGS = Path(__file__).parents[1] / "configs"
CHILD = """
import resource, sys
from controller.cli.commands import invoke
code = invoke(sys.argv[1:])
peak_kib = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
sys.stderr.write(f"PEAK {peak_kib}\\n")
sys.exit(code)
"""


class Cost(NamedTuple):
    simulated_seconds: float
    cpu_seconds: float
    wall_seconds: float
    peak_mib: float


def rehearse(sequence: Path, record: Path) -> Cost:
    """One rehearsal in a child process on one core."""
    pin = ["taskset", "-c", "0"] if os.path.exists("/usr/bin/taskset") else []
    before = os.times()
    start = time.perf_counter()
    child = subprocess.run(
        [
            *pin, sys.executable, "-c", CHILD, "rehearse", str(sequence),
            "--record", str(record), "--seed", "1", "--json",
        ],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    wall = time.perf_counter() - start
    after = os.times()
    cpu = after.children_user + after.children_system - before.children_user - before.children_system
    peak_kib = float(child.stderr.rpartition("PEAK ")[2])
    return Cost(float(json.loads(child.stdout)["simulated_seconds"]), cpu, wall, peak_kib / 1024)


def one_cycle(folder: Path) -> Path:
    """The same sequence cut to one cycle: what a rehearsal costs before its cycles begin."""
    text = (CONFIGS / "eight-hours" / "sequence.toml").read_text(encoding="utf-8")
    text = re.sub(r"^(blocks|cycles_per_block) = \d+", r"\1 = 1", text, flags=re.M)
    text = text.replace('"../', f'"{CONFIGS}/')
    path = folder / "one-cycle.toml"
    path.write_text(text, encoding="utf-8")
    return path


def per_hour(cost: Cost, start: Cost) -> float:
    """Processor seconds per hour of instrument time, without what every rehearsal costs at its start."""
    hours = (cost.simulated_seconds - start.simulated_seconds) / 3600
    return (cost.cpu_seconds - start.cpu_seconds) / hours


def measure() -> list[Figure]:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        start = rehearse(one_cycle(folder), folder / "start.sqlite")
        long = rehearse(CONFIGS / "eight-hours" / "sequence.toml", folder / "8h.sqlite")
        short = rehearse(CONFIGS / "eight-hours" / "one-hour.toml", folder / "1h.sqlite")
        size_mib = (folder / "8h.sqlite").stat().st_size / 2**20
    speed = long.simulated_seconds / long.wall_seconds
    per_hour_long, per_hour_short = per_hour(long, start), per_hour(short, start)
    growth = per_hour_long / per_hour_short
    hours_between = (long.simulated_seconds - short.simulated_seconds) / 3600
    mib_per_hour = (long.peak_mib - short.peak_mib) / hours_between
    return [
        Figure(
            "8 h rehearsal against real time",
            f"{long.wall_seconds:.1f} s",
            f"{long.simulated_seconds / 3600:.2f} h of instrument time",
            f"{speed:.0f} times faster",
            "at least 1000",
            speed >= 1000,
            f"one core, all ticks, telemetry and records ({size_mib:.0f} MiB of record)",
        ),
        Figure(
            "peak memory of the 8 h rehearsal",
            f"{long.peak_mib:.0f} MiB",
            f"1 h: {short.peak_mib:.0f} MiB",
            f"{mib_per_hour:+.1f} MiB an hour",
            "under 300 MB and flat (under 2 MiB an hour)",
            long.peak_mib * 1.048576 < 300 and mib_per_hour < 2.0,
            "the growth is the reduction's, which holds all gates of the run at its end",
        ),
        Figure(
            "cost per simulated hour, 8 h against 1 h",
            f"{per_hour_long:.2f} s of processor",
            f"1 h: {per_hour_short:.2f} s",
            f"{growth:.3f}",
            "within 10 %",
            0.9 <= growth <= 1.1,
            f"without the start of {start.cpu_seconds:.1f} s (imports, plant, conditioning, first centring)",
        ),
    ]
