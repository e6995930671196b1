"""Measure everything and write ``benchmarks/results.md``."""

from __future__ import annotations

import os
import platform
import sys
from pathlib import Path

from benchmarks import determinism, hysteresis, rehearsal, startup
from benchmarks.figure import Figure, page


def main() -> int:
    figures: list[Figure] = []
    for module in (startup, hysteresis, determinism, rehearsal):
        print(f"measuring {module.__name__.rpartition('.')[2]} ...", flush=True)
        found = module.measure()
        for figure in found:
            verdict = "met" if figure.met else "NOT MET"
            measured = f"{figure.ours}; {figure.against}; {figure.ratio}"
            print(f"  {figure.name}: {measured}; goal {figure.goal}: {verdict}")
        figures += found
    python, system = platform.python_version(), f"{platform.system()} {platform.machine()}"
    machine = f"Python {python}, {system}, {os.cpu_count()} cores"
    Path(__file__).with_name("results.md").write_text(page(figures, machine), encoding="utf-8")
    print("written to benchmarks/results.md")
    return 0 if all(figure.met for figure in figures) else 1


if __name__ == "__main__":
    sys.exit(main())
