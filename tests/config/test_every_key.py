"""Every key of the shipped files, spoilt in every way that its kind allows: one refusal each, at its line."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from controller.config.faults import Faults
from controller.config.instrument import Instrument
from controller.config.load import key_text, known_keys, parse, unit_of
from controller.config.sample import Sample
from controller.config.sequence import Sequence
from controller.errors import ConfigRefused

CONFIGS = Path(__file__).parents[2] / "configs"
FILES: list[tuple[type[Any], str]] = [
    (Instrument, "bench/instrument.toml"),
    (Sequence, "strontium/sequence.toml"),
    (Sample, "lead-thorium-uranium/sample.toml"),
    (Faults, "faults/deviation.toml"),
]
LINE = re.compile(r"(?P<key>[a-z_]+) = (?P<value>[^{\[#]+?)\s*(?:#.*)?")  # of a key with a plain value
Key = tuple[type[Any], str, int, tuple[Any, ...], str]  # model, file, line number, path, value as written


def plain_keys() -> Iterator[Key]:
    """Where every key with a plain value stands, by a reading of the lines that is the test's own."""
    for model, name in FILES:
        table: tuple[Any, ...] = ()
        counts: dict[str, int] = {}
        for number, line in enumerate((CONFIGS / name).read_text(encoding="utf-8").splitlines(), 1):
            if line.startswith("[["):
                title = line.strip("[]")
                counts[title] = counts.get(title, -1) + 1
                table = (title, counts[title])
            elif line.startswith("["):
                table = tuple(line.strip("[]").split("."))
            elif found := LINE.fullmatch(line):
                yield model, name, number, (*table, found["key"]), found["value"]


def distinct() -> list[Key]:
    """The last of each kind of key: one of the devices, of the ions and so on."""
    kinds: dict[tuple[Any, ...], Key] = {}
    for key in plain_keys():
        named = tuple(step for step in key[3] if not isinstance(step, int))
        kinds[key[0], (named[0], named[-1]) if named[0] == "devices" else named] = key
    return list(kinds.values())


KEYS = distinct()
QUANTITIES = [key for key in KEYS if unit_of(key[0], key[3])]


def lines_of(name: str) -> list[str]:
    return (CONFIGS / name).read_text(encoding="utf-8").splitlines()


def refusal(model: type[Any], lines: list[str]) -> ConfigRefused:
    with pytest.raises(ConfigRefused) as caught:
        parse("\n".join(lines), "my.toml", model)
    found = caught.value
    assert len(str(found).splitlines()) == 1
    assert found.next_action
    assert f"Next: {found.next_action}" in str(found)
    return found


def spoilt(key: Key, value: str) -> ConfigRefused:
    """The refusal of a file in which this key has another value; it must name the place."""
    model, name, number, path, _ = key
    lines = lines_of(name)
    lines[number - 1] = f"{path[-1]} = {value}"
    found = refusal(model, lines)
    assert (found.line, found.key) == (number, key_text(path)), str(found)
    assert str(found).startswith(f"CONFIG REFUSED my.toml, line {number}; key {key_text(path)}")
    return found


def test_the_sweep_finds_the_keys() -> None:
    assert len(KEYS) > 120
    assert len(QUANTITIES) > 60


def test_a_misspelt_key_is_refused_with_the_right_one() -> None:
    """Two letters exchanged, the commonest slip of typing (common practice, no source)."""
    for model, name, number, path, value in KEYS:
        key = path[-1]
        if len(key) < 4:  # too short to tell what was meant
            continue
        at = 1 if key[1] != key[2] else 2
        wrong = key[:at] + key[at + 1] + key[at] + key[at + 2 :]
        assert wrong not in known_keys(model, path[:-1])
        lines = lines_of(name)
        lines[number - 1] = f"{wrong} = {value}"
        found = refusal(model, lines)
        assert (found.line, found.key) == (number, key_text((*path[:-1], wrong)))
        assert found.next_action == f"did you mean {key!r}?", str(found)


def outcome(model: type[Any], lines: list[str]) -> ConfigRefused | None:
    try:
        parse("\n".join(lines), "my.toml", model)
    except ConfigRefused as refused:
        return refused
    return None


def test_a_key_left_out_has_a_default_or_is_missed() -> None:
    missed = 0
    for model, name, number, path, _ in KEYS:
        lines = lines_of(name)
        lines[number - 1] = ""
        found = outcome(model, lines)
        if found is not None:
            missed += 1
            assert re.search("missing key|needs a role", str(found)), str(found)
            assert found.key == key_text(path)
            assert 1 <= (found.line or 0) <= number
    assert missed > 80


def test_a_quantity_without_its_unit_is_refused_with_an_example() -> None:
    for place, key in enumerate(QUANTITIES):
        number = key[4].strip('"').split()[0]
        written, says = ((number, "needs a unit, for"), (f'"{number}"', "has no unit; write for"))[place % 2]
        assert f"{says} example '" in str(spoilt(key, written))


def test_a_quantity_in_another_unit_is_refused_with_its_own() -> None:
    for key in QUANTITIES:
        wrong = "3 lux" if unit_of(key[0], key[3]) != "lx" else "3 V"
        found = spoilt(key, f'"{wrong}"')
        assert f"{wrong!r} is not a quantity in {unit_of(key[0], key[3])}" in str(found)
        assert found.value == wrong


ODD = ["true", "false", "[]", "{}", "1979-05-27", '""', '"nan V"', "nan", "inf"]


def test_what_is_no_quantity_is_refused() -> None:
    for place, key in enumerate(QUANTITIES * 2):
        spoilt(key, ODD[place % len(ODD)])


def test_what_is_beyond_a_bound_is_refused_as_written_with_the_limit_in_its_unit() -> None:
    above = 0
    for key in QUANTITIES:
        model, name, number, path, _ = key
        unit = unit_of(model, path)
        low = spoilt(key, f'"-1e7 {unit}"')
        assert low.value == f"-1e7 {unit}"
        assert re.fullmatch(rf"(?:above|at least) \S+ {re.escape(unit)}", str(low.limit)), str(low)
        lines = lines_of(name)
        lines[number - 1] = f'{path[-1]} = "1e12 {unit}"'
        high = outcome(model, lines)
        if high is not None and high.limit is not None:
            above += 1
            assert (high.key, high.line, high.value) == (key_text(path), number, f"1e12 {unit}")
            assert re.fullmatch(rf"at most \S+ {re.escape(unit)}", high.limit), str(high)
    assert above > 25


@pytest.mark.parametrize(
    ("old", "new", "key", "says"),
    [
        ('trip = "75 degC"', 'trip = "-75 degC"', "magnet.coil_kelvin_trip", "= '-75 degC'; too small"),
        ('trip = "75 degC"', 'trip = "-75 degC"', "magnet.coil_kelvin_trip", "limit: above 273 K"),
        ('gap = "15 mm"', 'gap = "15 m"', "geometry.esa_gap", "= '15 m'; too large; limit: at most 0.2 m"),
        (
            'window = "15 ppm"',
            'window = "15 %"',
            "magnet.field_window",
            "= '15 %'; too large; limit: at most 0.01",
        ),
        (
            '"simulated"',
            '"hardware"',
            "devices.magnet.address",
            "'sim:magnet' does not go with kind 'hardware'",
        ),
    ],
)
def test_a_limit_has_its_unit_and_the_value_is_as_written(old: str, new: str, key: str, says: str) -> None:
    text = (CONFIGS / "bench" / "instrument.toml").read_text(encoding="utf-8")
    assert text.count(old) == 1
    found = refusal(Instrument, text.replace(old, new).splitlines())
    assert found.key == key
    assert says in str(found)


def test_optional_quantities_have_their_unit_too() -> None:
    assert unit_of(Sequence, ("run", "gate")) == "s"
    assert unit_of(Faults, ("faults", 0, "lasts")) == "s"
    assert unit_of(Sequence, ("run", "blocks")) == ""
    assert unit_of(Sequence, ("nowhere", "blocks")) == ""


@pytest.mark.parametrize(
    ("old", "new", "key", "line_starts", "says"),
    [
        ("[run]", "[[run]]", "run", "[[run]]", "needs a table. Next: write it under [run]"),
        ("[reduction]", "[[reduction]]", "reduction", "[[reduction]]", "needs a table"),
        ("[normalisation]", "[[normalisation]]", "normalisation", "[[normalisation]]", "needs a table"),
        ("[run]", 'backgrounds = "no"\n[run]', "backgrounds", 'backgrounds = "no"', "needs a list"),
    ],
)
def test_a_table_of_the_wrong_kind_is_said_in_words(
    old: str, new: str, key: str, line_starts: str, says: str
) -> None:
    text = (CONFIGS / "strontium" / "sequence.toml").read_text(encoding="utf-8")
    if key == "backgrounds":
        text = re.sub(r"\[\[backgrounds\]\]\n(?:.+\n)+\n", "", text)
    text = text.replace(old, new)
    found = refusal(Sequence, text.splitlines())
    assert (found.key, text.splitlines()[(found.line or 0) - 1]) == (key, line_starts)
    assert says in str(found)


def test_an_empty_list_is_said_in_words() -> None:
    text = 'name = "x"\n[source]\nkind = "thermal"\n[[components]]\nname = "c"\nrate = "1 Hz"\nions = {}\n'
    found = refusal(Sample, text.splitlines())
    assert (found.line, found.key) == (7, "components[0].ions")
    assert "is empty. Next: enter 1 or more" in str(found)
    assert refusal(Faults, ["faults = []"]).line == 1


def test_the_place_does_not_depend_on_how_lines_end() -> None:
    """CR LF is a line ending of TOML 1.0, too."""
    text = (CONFIGS / "strontium" / "sequence.toml").read_text(encoding="utf-8")
    wrong = text.replace('dwell = "4 s"', 'dwell = "4 V"')
    with pytest.raises(ConfigRefused) as caught:
        parse(wrong.replace("\n", "\r\n"), "my.toml", Sequence)
    assert caught.value.line == wrong[: wrong.index('"4 V"')].count("\n") + 1


def test_the_files_say_what_the_settings_hold() -> None:
    """Plain numbers of the shipped sequence come through as tomllib reads them."""
    text = (CONFIGS / "strontium" / "sequence.toml").read_text(encoding="utf-8")
    data, made = tomllib.loads(text), parse(text, "my.toml", Sequence)
    assert [ion["ion"] for ion in data["ions"]] == [ion.ion for ion in made.ions]
    assert [ion["expected_rate"] for ion in data["ions"]] == [ion.expected_rate for ion in made.ions]
    assert data["run"]["blocks"] == made.run.blocks
    assert data["interferences"][0]["ratio"] == made.interferences[0].ratio
