"""The house: imports run one way, the kernel is pure, one hand on the switch, files stay small."""

from __future__ import annotations

import ast
import io
import subprocess
import sys
import tokenize
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
OURS = ("controller", "drivers", "simulator")
KERNEL = [
    ROOT / "controller" / "safety" / f"{name}.py" for name in ("values", "interlocks", "guard", "safestate")
]


def sources(*folders: str) -> Iterator[Path]:
    for folder in folders:
        yield from sorted((ROOT / folder).rglob("*.py"))


def imports(path: Path) -> set[str]:
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            found.add(str(node.module))
    return found


def ours(path: Path) -> set[str]:
    return {name for name in imports(path) if name.partition(".")[0] in OURS}


def test_the_simulator_imports_nothing_of_the_others() -> None:
    for path in sources("simulator"):
        assert all(name.startswith("simulator") for name in ours(path)), path


def test_the_drivers_import_only_drivers() -> None:
    for path in sources("drivers"):
        assert all(name.startswith("drivers") for name in ours(path)), path
    assert not ours(ROOT / "drivers" / "contract.py")


def test_only_the_composition_root_imports_the_simulator() -> None:
    for path in sources("controller"):
        if any(name.startswith("simulator") for name in ours(path)):
            assert path.parent.name == "cli", path


def test_nothing_imports_the_composition_root_but_the_entry_point() -> None:
    for path in sources("controller"):
        if any(name.startswith("controller.cli") for name in ours(path)):
            assert path.parent.name == "cli" or path.name == "__main__.py", path


LOWER_THAN_SAFETY = (
    "controller.config",
    "controller.physics",
    "controller.errors",
    "controller.record.journal",
)


def test_the_safety_layer_knows_nothing_of_the_sequence() -> None:
    for path in sources("controller/safety"):
        for name in ours(path):
            allowed = (*LOWER_THAN_SAFETY, "controller.safety", "drivers.contract", "drivers.clock")
            assert name.startswith(allowed), f"{path.name} imports {name}"


@pytest.mark.parametrize("path", KERNEL, ids=lambda path: path.stem)
def test_the_kernel_is_pure(path: Path) -> None:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    allowed = {"__future__", "dataclasses", "enum", "math", "typing", "collections.abc", "drivers.contract"}
    kernel = {f"controller.safety.{each.stem}" for each in KERNEL}
    assert imports(path) <= allowed | kernel
    for node in ast.walk(tree):
        assert not isinstance(
            node, ast.Await | ast.AsyncFunctionDef | ast.AsyncFor | ast.AsyncWith | ast.Global
        )
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
            assert node.func.id not in {"open", "print", "input", "exec", "eval", "__import__"}


def code_lines(path: Path) -> int:
    """Lines that hold code: neither blank nor comment nor docstring."""
    text = path.read_text(encoding="utf-8")
    silent: set[int] = set()
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.Module | ast.ClassDef | ast.FunctionDef) and ast.get_docstring(node):
            silent.update(range(node.body[0].lineno, (node.body[0].end_lineno or 0) + 1))
    skipped = {
        tokenize.COMMENT,
        tokenize.NL,
        tokenize.NEWLINE,
        tokenize.INDENT,
        tokenize.DEDENT,
        tokenize.ENDMARKER,
    }
    lines: set[int] = set()
    for token in tokenize.generate_tokens(io.StringIO(text).readline):
        if token.type not in skipped:
            lines.update(range(token.start[0], token.end[0] + 1))
    return len(lines - silent)


def test_the_kernel_is_small_enough_to_read_in_one_sitting() -> None:
    """At most 700 lines of code; the theory in the headers and comments is not counted."""
    assert sum(code_lines(path) for path in KERNEL) <= 700


def test_only_the_gateway_acts_on_an_output() -> None:
    """No other module of the controller names a handle's method on anything that could be a handle."""
    for path in sources("controller"):
        if path.name == "gateway.py":
            continue
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Attribute):
                assert node.attr not in {"write_limits", "read_limits", "enable", "disable"}, (
                    f"{path}:{node.lineno}"
                )
                if node.attr == "handle":  # looked at once, where the layer is put together
                    assert path.name == "assembly.py", f"{path}:{node.lineno}"


def test_files_stay_small() -> None:
    for path in sources(*OURS, "benchmarks"):
        assert len(path.read_text(encoding="utf-8").splitlines()) <= 400, path


def test_only_the_clock_reads_time() -> None:
    for path in sources(*OURS):
        if path.name == "clock.py":
            continue
        names = imports(path)
        assert "time" not in names, path
        text = path.read_text(encoding="utf-8")
        assert "datetime.now" not in text, path
        assert "utcnow" not in text, path


def test_help_loads_nothing_heavy() -> None:
    code = (
        "import sys; from controller.cli.commands import invoke; invoke(['--help'])\n"
        "heavy = {'scipy', 'matplotlib', 'pint', 'pyarrow', 'numpy', 'pydantic'} & set(sys.modules)\n"
        "sys.exit(','.join(sorted(heavy)) or 0)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
