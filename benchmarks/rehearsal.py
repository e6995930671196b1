"""Rehearsing 1 h and 8 h of acquisition: speed against real time, memory, cost per simulated hour.

Each rehearsal is a process of its own, pinned to one core where the system allows it, so that its
peak memory is its own and nothing runs beside it.
"""

from __future__ import annotations

import json
import os
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


def measure() -> list[Figure]:
    with tempfile.TemporaryDirectory() as folder:
        long = rehearse(CONFIGS / "eight-hours" / "sequence.toml", Path(folder) / "8h.sqlite")
        short = rehearse(CONFIGS / "eight-hours" / "one-hour.toml", Path(folder) / "1h.sqlite")
        size_mib = (Path(folder) / "8h.sqlite").stat().st_size / 2**20
    speed = long.simulated_seconds / long.wall_seconds
    per_hour_long = long.cpu_seconds / (long.simulated_seconds / 3600)
    per_hour_short = short.cpu_seconds / (short.simulated_seconds / 3600)
    # what a process costs before its first tick is not a cost of simulated time
    growth = per_hour_long / per_hour_short
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
            f"{long.peak_mib / short.peak_mib:.2f}",
            "under 300 MB and flat",
            long.peak_mib * 1.048576 < 300 and long.peak_mib / short.peak_mib < 1.1,
        ),
        Figure(
            "cost per simulated hour, 8 h against 1 h",
            f"{per_hour_long:.2f} s of processor",
            f"1 h: {per_hour_short:.2f} s",
            f"{growth:.3f}",
            "within 10 %",
            0.9 <= growth <= 1.1,
        ),
    ]
