"""The shape of the safety layer: who may reach what, how large the kernel is, what it may import."""

from __future__ import annotations

import ast
import gc
import types
from pathlib import Path

from safety_plant import FILE, Journal, Rig, run

from controller.safety.interlocks import ROWS, TABLE
from controller.safety.values import OUTPUTS
from controller.safety.words import WORDS
from drivers.contract import OutputHandle

ROOT = FILE.parents[2]
SAFETY = ROOT / "controller" / "safety"
KERNEL = ("values", "interlocks", "guard", "safestate")
ALLOWED = {"__future__", "math", "typing", "enum", "dataclasses", "drivers.contract"}


def imports(path: Path) -> set[str]:
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            found.add(node.module or "")
    return found


def test_the_kernel_is_pure_by_what_it_imports_and_by_what_it_says() -> None:
    own = {f"controller.safety.{name}" for name in KERNEL}
    for name in KERNEL:
        path = SAFETY / f"{name}.py"
        assert imports(path) <= ALLOWED | own, name
        tree = ast.parse(path.read_text())
        for node in ast.walk(tree):
            assert not isinstance(
                node, (ast.Await, ast.AsyncFunctionDef, ast.AsyncFor, ast.AsyncWith, ast.Global, ast.Nonlocal)
            ), f"{name}: line {getattr(node, 'lineno', '?')}"
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
                assert node.func.id not in ("open", "print", "input", "exec", "eval", "__import__"), name
            assert not isinstance(node, (ast.Raise, ast.Assert)), f"{name} raises: line {node.lineno}"


def code_lines(path: Path) -> int:
    """Lines that are neither blank nor comment nor docstring."""
    source = path.read_text()
    prose: set[int] = set()
    for node in ast.walk(ast.parse(source)):
        if (
            isinstance(node, (ast.Module, ast.ClassDef, ast.FunctionDef))
            and isinstance(node.body[0], ast.Expr)
            and isinstance(node.body[0].value, ast.Constant)
        ):
            prose |= set(range(node.body[0].lineno, (node.body[0].end_lineno or 0) + 1))
    return sum(
        1
        for number, line in enumerate(source.splitlines(), 1)
        if line.strip() and not line.strip().startswith("#") and number not in prose
    )


def test_the_kernel_can_be_read_in_an_evening() -> None:
    assert sum(code_lines(SAFETY / f"{name}.py") for name in KERNEL) <= 700


def test_no_file_and_no_function_of_the_layer_is_long() -> None:
    for path in [*SAFETY.glob("*.py"), *(ROOT / "drivers").glob("*.py")]:
        assert len(path.read_text().splitlines()) <= 400, path.name
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, (ast.FunctionDef, ast.AsyncFunctionDef)):
                assert (node.end_lineno or 0) - node.lineno < 60, f"{path.name}: {node.name}"


def test_only_the_gateway_and_those_who_open_devices_name_a_handle() -> None:
    """Nobody else names the type, calls its own methods, or takes it out of an opened device."""
    for path in sorted((ROOT / "controller").rglob("*.py")):
        relative = path.relative_to(ROOT / "controller").as_posix()
        if relative == "safety/gateway.py" or relative.startswith("cli/"):
            continue
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, ast.Name):
                assert node.id != "OutputHandle", relative
            elif isinstance(node, ast.ImportFrom):
                assert "OutputHandle" not in [alias.name for alias in node.names], relative
            elif isinstance(node, ast.Attribute):
                assert node.attr not in ("write_limits", "read_limits", "_handles"), relative
                if relative != "safety/assembly.py":  # hands them from the devices to the gateway
                    assert node.attr != "handle", relative


def reachable(start: object, *, not_through: tuple[object, ...]) -> set[int]:
    """Everything that attributes, containers, bound methods and closures lead to from ``start``."""
    barred = {id(thing) for thing in not_through}
    seen: set[int] = set()
    waiting: list[object] = [start]
    while waiting:
        thing = waiting.pop()
        if id(thing) in seen or id(thing) in barred:
            continue
        # modules, classes and functions' globals lead to the whole program; instances are what is asked
        if isinstance(thing, (types.ModuleType, type, types.CodeType, types.FrameType)):
            continue
        seen.add(id(thing))
        if isinstance(thing, types.FunctionType):
            waiting.extend(cell.cell_contents for cell in thing.__closure__ or ())
            waiting.extend(thing.__defaults__ or ())
            continue
        waiting.extend(gc.get_referents(thing))
    return seen


def test_handles_are_reached_through_the_gateway_alone() -> None:
    async def body(rig: Rig) -> None:
        handles = [rig.opened[name].handle for name in OUTPUTS]
        assert all(isinstance(handle, OutputHandle) for handle in handles)
        monitors = [each.monitor for each in rig.opened.values()]
        rig.opened = {}
        loop_things = (rig.clock, rig.clock._loop)
        open_way = reachable(rig.supervisor, not_through=loop_things)
        assert {id(handle) for handle in handles} <= open_way, "the walk finds what there is to find"
        for start in (rig.supervisor, *monitors):
            found = reachable(start, not_through=(rig.gateway, *loop_things))
            assert not found & {id(handle) for handle in handles}
        held_by = rig.gateway._handles
        local = {id(handles)}
        for handle in handles:
            holders = [
                each for each in gc.get_referrers(handle)
                if not isinstance(each, types.FrameType) and id(each) not in local
                and not isinstance(each, types.CoroutineType)
            ]  # fmt: skip
            assert holders == [held_by], holders

    run(body)


def test_the_words_and_the_table_have_the_same_rows() -> None:
    assert list(WORDS) == list(TABLE) == [row.id for row in ROWS]
    assert all(says and then for says, then in WORDS.values())


def test_a_journal_of_the_tests_is_a_journal() -> None:
    """The test's double answers every method that the protocol names."""
    from controller.record.journal import Journal as Protocol

    wanted = {name for name in vars(Protocol) if not name.startswith("_")}
    assert wanted <= set(dir(Journal()))
