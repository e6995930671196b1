"""The ratio table for a terminal: plain ASCII, no tabs, at most 100 columns.

Uncertainties are given to two significant digits and values to the same decimal place. Beside a value
stands the truth where it is known (a rehearsal), with the difference in standard uncertainties.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Mapping

from controller.reduce.result import RatioResult, Reduction

WIDTH = 100
NAME_WIDTH = 24
DIGITS_MAX = 11  # of a value; no ratio is known better


def ratio_table(reduction: Reduction, truth: Mapping[str, float] | None = None) -> str:
    """The table, then one line a ratio with the parts of its uncertainty, then what must be known."""
    known = truth or {}
    heads = ["ratio", "value", "u/ppm", "U(95 %)", "groups", "chi2"]
    if known:
        heads += ["truth", "diff/u"]
    cells = [heads] + [_cells(result, known) for result in reduction.results]
    lines = _aligned(cells)
    lines += ["", "Parts of u, in ppm of the ratio (k: coverage factor of the 95 % interval):"]
    for result in reduction.results:
        lines += _wrapped(f"  {result.name}: {_parts(result)}", "    ")
    lines += _notes(reduction)
    return "\n".join(lines)


def _cells(result: RatioResult, known: Mapping[str, float]) -> list[str]:
    row = [
        result.name,
        _number(result.value, result.u),
        _ppm(result.u, result.value),
        _number(result.expanded, result.u),
        str(result.groups),
        "-" if result.chi2 is None else f"{result.chi2:.2f}",
    ]
    if known:
        true = known.get(result.name, math.nan)
        away = (result.value - true) / result.u if result.u > 0 else math.nan
        row += [_number(true, result.u), f"{away:+.2f}" if math.isfinite(away) else "-"]
    return row


def _number(value: float, u: float) -> str:
    """``value`` to the second significant digit of ``u``."""
    if not math.isfinite(value):
        return "-"
    largest = max(abs(value), u) if u > 0 else abs(value)  # NaN is not above zero
    size = math.floor(math.log10(largest)) if largest else 0
    fine = math.floor(math.log10(u)) - 1 if math.isfinite(u) and u > 0 else size - DIGITS_MAX + 1
    digits = min(max(size - fine + 1, 1), DIGITS_MAX)
    if size < -4 or size >= DIGITS_MAX:
        return f"{value:.{digits - 1}e}"
    return f"{value:.{max(0, digits - 1 - size)}f}"


def _ppm(part: float, whole: float) -> str:
    """Two significant digits, or whole ppm; "-" where undefined."""
    if not (math.isfinite(part) and math.isfinite(whole)) or whole == 0:
        return "-"
    ppm = 1e6 * part / abs(whole)
    if ppm >= 1e7:
        return f"{ppm:.1e}"
    if ppm == 0 or ppm >= 10:
        return f"{ppm:.0f}"
    return f"{ppm:.2g}" if ppm >= 1e-3 else f"{ppm:.0e}"


def _parts(result: RatioResult) -> str:
    if not math.isfinite(result.u):
        return "no uncertainty"
    parts = [("statistical", result.u_statistical)]
    parts += sorted(result.components.items(), key=lambda part: -part[1])
    told = ", ".join(f"{name} {_ppm(part, result.value)}" for name, part in parts)
    floor = "" if result.floor_ratio is None else f"; statistical {result.floor_ratio:.2f} x counting floor"
    return f"{told}; k = {result.coverage:.2f}{floor}"


def _notes(reduction: Reduction) -> list[str]:
    lines: list[str] = []
    for result in reduction.results:
        for note in result.notes:
            lines += _wrapped(f"  {result.name}: {note}", "    ")
    for note in reduction.notes:
        lines += _wrapped(f"  {note}", "    ")
    return ["", "Notes:", *lines] if lines else []


def _aligned(cells: list[list[str]]) -> list[str]:
    """Name to the left, figures to the right; a long name gets a line of its own."""
    widths = [max(len(row[column]) for row in cells) for column in range(len(cells[0]))]
    widths[0] = min(widths[0], NAME_WIDTH)
    lines = []
    for row in cells:
        name = row[0]
        if len(name) > NAME_WIDTH:
            lines += textwrap.wrap(name, WIDTH)
            name = ""
        figures = (cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True))
        lines.append("  ".join([name.ljust(widths[0]), *figures]).rstrip())
    return lines


def _wrapped(text: str, indent: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, subsequent_indent=indent, drop_whitespace=True, break_on_hyphens=False)
