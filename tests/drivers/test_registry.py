"""The table of drivers: every entry loads, packages extend it, nobody replaces it."""

from __future__ import annotations

import ast
import sys
from importlib import import_module
from pathlib import Path

import pytest

import drivers
from drivers.contract import DeviceAbsent, Monitor, Opened
from drivers.registry import DRIVERS, driver_names, open_device


class NoLink:
    """A link that nobody speaks to."""

    def identify(self):
        raise AssertionError

    def request_report(self, deliver):
        raise AssertionError

    async def command(self, verb, *values):
        raise AssertionError

    def close(self):
        self.closed = True


@pytest.mark.parametrize("name", sorted(DRIVERS))
def test_every_driver_opens_without_speaking(name: str) -> None:
    link = NoLink()
    opened = open_device("role", name, link, lambda: 0)
    assert isinstance(opened, Opened)
    assert isinstance(opened.monitor, Monitor)
    opened.monitor.close()
    assert link.closed


def test_an_unknown_driver_names_the_known_ones() -> None:
    with pytest.raises(DeviceAbsent, match="magnet-supply"):
        open_device("role", "no-such", NoLink(), lambda: 0)


@pytest.fixture
def package(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """An installed package with two entry points, one of which tries to replace a driver of the table."""
    (tmp_path / "theirs.py").write_text(
        "from drivers.polled import Family, Quantity\n"
        "class Thermometer(Family):\n"
        "    quantities = (Quantity('kelvin', 'K', 1.0, 1000.0),)\n"
    )
    info = tmp_path / "theirs-1.dist-info"
    info.mkdir()
    (info / "METADATA").write_text("Metadata-Version: 2.1\nName: theirs\nVersion: 1\n")
    (info / "entry_points.txt").write_text(
        "[trackfield.drivers]\nthermometer = theirs:Thermometer\ncounter = theirs:Thermometer\n"
    )
    monkeypatch.syspath_prepend(str(tmp_path))
    monkeypatch.delitem(sys.modules, "theirs", raising=False)


@pytest.mark.usefixtures("package")
def test_a_package_adds_a_driver_by_its_entry_point() -> None:
    assert "thermometer" in driver_names()
    opened = open_device("oven", "thermometer", NoLink(), lambda: 0)
    assert [channel.name for channel in opened.monitor.channels] == ["oven.kelvin"]


@pytest.mark.usefixtures("package")
def test_a_package_cannot_replace_a_driver_of_the_table() -> None:
    opened = open_device("x", "counter", NoLink(), lambda: 0)
    assert [channel.name for channel in opened.monitor.channels] == ["x.rate"]


def test_drivers_import_only_drivers() -> None:
    for path in sorted(Path(drivers.__file__).parent.glob("*.py")):
        for node in ast.walk(ast.parse(path.read_text())):
            names = (
                [alias.name for alias in node.names] if isinstance(node, ast.Import)
                else [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            )  # fmt: skip
            for name in names:
                top = name.partition(".")[0]
                assert top not in ("controller", "simulator", "tests", "benchmarks"), f"{path.name}: {name}"


def test_the_contract_imports_nothing_of_ours() -> None:
    source = Path(import_module("drivers.contract").__file__).read_text()
    assert "import drivers" not in source
    assert "from drivers" not in source
