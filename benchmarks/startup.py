"""``trackfield --help`` as a whole process, against the bare interpreter."""

from __future__ import annotations

import statistics
import subprocess
import sys
import time

from benchmarks.figure import Figure

RUNS = 11


def _median_ms(*command: str) -> float:
    times = []
    for _ in range(RUNS):
        start = time.perf_counter()
        subprocess.run(command, check=True, capture_output=True)
        times.append(time.perf_counter() - start)
    return 1000 * statistics.median(times)


def measure() -> list[Figure]:
    bare = _median_ms(sys.executable, "-c", "pass")
    ours = _median_ms(sys.executable, "-m", "controller", "--help")
    return [
        Figure(
            "start-up of `trackfield --help`",
            f"{ours:.0f} ms",
            f"bare interpreter {bare:.0f} ms",
            f"{ours / bare:.1f}",
            "under 300 ms",
            ours < 300,
            f"median of {RUNS} whole processes each",
        )
    ]
