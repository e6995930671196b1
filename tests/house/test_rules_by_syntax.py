"""Rules of the house that are read off the syntax tree; each reader is first shown something to find."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
SAFETY = ROOT / "controller" / "safety"
KERNEL = [SAFETY / f"{name}.py" for name in ("values", "interlocks", "guard", "safestate")]
PRODUCT = ("controller", "drivers", "simulator")
HEAVY = ("scipy", "matplotlib", "pint", "pyarrow")
CLOCKS = {"now", "utcnow", "today", "monotonic", "monotonic_ns", "time_ns", "perf_counter", "perf_counter_ns"}
Reader = Callable[[ast.AST], list[int]]


def tree_of(path: Path) -> ast.Module:
    return ast.parse(path.read_text(encoding="utf-8"))


def sources(*folders: str) -> list[Path]:
    found = [path for folder in folders for path in sorted((ROOT / folder).rglob("*.py"))]
    assert len(found) > 10
    return found


def impure(tree: ast.AST) -> list[int]:
    """Lines that wait, print, read a file, a clock or chance, or keep a log."""
    named = {"open", "print", "time", "random", "logging", "asyncio", "datetime"}
    lines = []
    for node in ast.walk(tree):
        waits = isinstance(node, ast.Await | ast.AsyncFunctionDef | ast.AsyncFor | ast.AsyncWith)
        uses = isinstance(node, ast.Name) and node.id in named
        takes = isinstance(node, ast.alias) and node.name.partition(".")[0] in named
        comes = isinstance(node, ast.ImportFrom) and str(node.module).partition(".")[0] in named
        if waits or uses or takes or comes:
            lines.append(getattr(node, "lineno", 0))
    return lines


def acts_on_outputs(tree: ast.AST) -> list[int]:
    """Lines that call, or only take, a method that a handle has."""
    methods = {"write", "enable", "disable", "write_limits"}
    return [n.lineno for n in ast.walk(tree) if isinstance(n, ast.Attribute) and n.attr in methods]


def reads_clocks(tree: ast.AST) -> list[int]:
    """Lines that ask the computer what time it is."""
    lines = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Attribute):
            owner = node.value.id if isinstance(node.value, ast.Name) else ""
            if owner == "time" or (node.attr in CLOCKS and owner != "self"):  # self.now was handed in
                lines.append(node.lineno)
        elif (isinstance(node, ast.Import) and "time" in [alias.name for alias in node.names]) or (
            isinstance(node, ast.ImportFrom) and node.module == "time"
        ):
            lines.append(node.lineno)
    return lines


@pytest.mark.parametrize(
    ("reader", "bad"),
    [
        (impure, "async def f():\n    await g()"),
        (impure, "print(1)"),
        (impure, "import random"),
        (impure, "from time import sleep"),
        (impure, "import logging.handlers"),
        (impure, "def f(x=open): ..."),
        (acts_on_outputs, "handle.write(3.0)"),
        (acts_on_outputs, "f = supply.disable"),
        (acts_on_outputs, "self._handles['magnet'].write_limits(x)"),
        (reads_clocks, "t = time.time()"),
        (reads_clocks, "from time import monotonic"),
        (reads_clocks, "datetime.now(UTC)"),
        (reads_clocks, "import time as t"),
        (reads_clocks, "dt.date.today()"),
    ],
)
def test_a_reader_finds_what_it_is_for(reader: Reader, bad: str) -> None:
    assert reader(ast.parse(bad))


@pytest.mark.parametrize("path", KERNEL, ids=lambda path: path.stem)
def test_the_kernel_neither_waits_nor_speaks_nor_asks(path: Path) -> None:
    assert impure(tree_of(path)) == []


def test_only_the_gateway_acts() -> None:
    """The command line has a test of its own; the drivers are the handles; the plant is what they drive."""
    acting = {
        path.relative_to(ROOT).as_posix()
        for path in sources("controller")
        if path.parent.name != "cli" and acts_on_outputs(tree_of(path))
    }
    assert acting == {"controller/safety/gateway.py"}


def test_the_command_line_writes_to_its_screen_alone() -> None:
    written = {
        ast.unparse(node)
        for path in sorted((ROOT / "controller" / "cli").glob("*.py"))
        for node in ast.walk(tree_of(path))
        if isinstance(node, ast.Attribute) and node.attr in {"write", "enable", "disable", "write_limits"}
    }
    assert written == {"sys.stdout.write", "sys.stderr.write"}


def test_one_file_knows_the_time() -> None:
    reading = {path.relative_to(ROOT).as_posix() for path in sources(*PRODUCT) if reads_clocks(tree_of(path))}
    assert reading == {"drivers/clock.py"}


def test_the_contract_stands_on_the_standard_library() -> None:
    for node in ast.walk(tree_of(ROOT / "drivers" / "contract.py")):
        names = [alias.name for alias in node.names] if isinstance(node, ast.Import) else []
        if isinstance(node, ast.ImportFrom):
            names.append(str(node.module))
        for name in names:
            assert name.partition(".")[0] in sys.stdlib_module_names, name


@pytest.mark.parametrize("how", ["--help", "-h", "--version", "rehearse --help", "no-such-command"])
def test_the_entry_point_is_quick_to_answer(how: str) -> None:
    """As the installed command starts: nothing heavy is imported before there is work to do."""
    code = (
        "import sys\n"
        f"sys.argv = ['trackfield', *{how.split()!r}]\n"
        "from controller.__main__ import main\n"
        "try:\n    main()\n"
        "except SystemExit as left:\n    code = int(left.code or 0)\n"
        f"loaded = sorted(set({HEAVY!r}) & set(sys.modules))\n"
        "print('LOADED', *loaded, 'CODE', code)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    expected = 2 if how == "no-such-command" else 0  # of a wrong use
    assert done.stdout.splitlines()[-1] == f"LOADED CODE {expected}"


def test_importing_the_entry_point_loads_next_to_nothing() -> None:
    unwanted = (*HEAVY, "click", "pydantic", "numpy")
    code = f"import sys, controller.__main__\nsys.exit(sorted(set({unwanted!r}) & set(sys.modules)) or 0)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False, cwd=ROOT)
    assert done.returncode == 0, done.stderr
