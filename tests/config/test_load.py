"""Every fault of a file is one refusal that names place, value, limit and the next action."""

from __future__ import annotations

import hashlib
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from controller.config.load import (
    line_of,
    load_faults,
    load_instrument,
    load_sample,
    load_sequence,
    parse_instrument,
    parse_sequence,
)
from controller.errors import ConfigRefused, ExitCode
from controller.route.plan import plan_route

CONFIGS = Path(__file__).parents[2] / "configs"
INSTRUMENT = (CONFIGS / "bench" / "instrument.toml").read_text(encoding="utf-8")
SEQUENCE = (CONFIGS / "strontium" / "sequence.toml").read_text(encoding="utf-8")


def line_with(text: str, part: str) -> int:
    return next(number for number, line in enumerate(text.splitlines(), 1) if part in line)


def refusal(text: str, old: str, new: str) -> tuple[ConfigRefused, int]:
    assert old in text
    changed = text.replace(old, new, 1)
    parse = parse_instrument if text is INSTRUMENT else parse_sequence
    with pytest.raises(ConfigRefused) as caught:
        parse(changed, "my.toml")
    marker = new.splitlines()[-1] if new.strip() else old
    return caught.value, line_with(changed, marker) if marker in changed else 0


INSTRUMENT_FAULTS = [
    ('nominal = "8 kV"', 'nominal = "80 kV"', "accelerating", "above volts_max"),
    ('esa_gap = "15 mm"', 'esa_gap = "15 V"', "geometry.esa_gap", "not a quantity in m"),
    ('esa_gap = "15 mm"', "esa_gap = 15", "geometry.esa_gap", "needs a unit"),
    ('esa_gap = "15 mm"', 'esa_gap = "15 m"', "geometry.esa_gap", "limit: at most 0.2"),
    ('esa_gap = "15 mm"', 'esa_gap = "0 m"', "geometry.esa_gap", "limit: above 0"),
    ('esa_gap = "15 mm"', 'esa_gpa = "15 mm"', "geometry.esa_gpa", "did you mean 'esa_gap'?"),
    ('safe_amps = "0.05 A"', 'safe_amps = "11 A"', "magnet", "must be below amps_max"),
    (
        'permit = "3e-4 Pa", trip = "1e-3 Pa"',
        'permit = "3e-3 Pa", trip = "1e-3 Pa"',
        "analyser_vacuum",
        "below trip",
    ),
    ('stale_after = "200 ms"', 'stale_after = "60 ms"', "stale_after", "at least two polls"),
    ('serial = "ESA-0001"', 'serial = "ACC-0001"', "devices", "the same serial"),
    ('kind = "simulated"', 'kind = "hardware"', "", "does not go with kind"),
    ('kind = "simulated"', 'kind = "imaginary"', "kind", "limit: 'simulated' or 'hardware'"),
    ('magnet_radius = "300 mm"', 'magnet_radius = "600 mm"', "", "no double focus"),
]


@pytest.mark.parametrize(("old", "new", "key", "says"), INSTRUMENT_FAULTS)
def test_an_instrument_fault_names_key_value_and_limit(old: str, new: str, key: str, says: str) -> None:
    found, line = refusal(INSTRUMENT, old, new)
    text = str(found)
    assert text.startswith("CONFIG REFUSED my.toml")
    assert says in text
    assert key in text
    assert "Next: " in text
    assert found.exit_code is ExitCode.CONFIG_REFUSED
    assert len(text.splitlines()) == 1
    if found.key and found.key.endswith(new.partition(" =")[0]):
        assert found.line == line


SEQUENCE_FAULTS = [
    ("blocks = 4\n", "", "run.blocks", "missing key"),
    ('ion = "85Rb+"', 'ion = "84Sr+"', "", "named twice: 84Sr+"),
    ('numerator = "87Sr+"', 'numerator = "89Sr+"', "", "is not an ion of this sequence"),
    ('monitor = "85Rb+"', 'monitor = "86Rb+"', "", "is not an ion of this sequence"),
    ('denominator = "86Sr+"', 'denominator = "87Sr+"', "", "divides 87Sr+ by itself"),
    ('dwell = "4 s"', 'dwell = "-4 s"', "ions[3].dwell", "limit: above 0"),
    ('law = "exponential"', 'law = "wishful"', "normalisation.law", "limit: 'exponential'"),
]


@pytest.mark.parametrize(("old", "new", "key", "says"), SEQUENCE_FAULTS)
def test_a_sequence_fault_names_key_value_and_limit(old: str, new: str, key: str, says: str) -> None:
    found, line = refusal(SEQUENCE, old, new)
    assert says in str(found)
    assert key in str(found)
    if found.key == "ions[3].dwell":
        assert found.line == line  # the fourth of four tables of the same name


def test_lines_are_found_in_tables_arrays_and_inline_tables() -> None:
    text = "a = 1\n[one]\nb = 2\n[[many]]\nc = 3\n[[many]]\nc = 4\nd = { e = 5 }\n[one.two]\nf = 6\n"
    assert line_of(text, ("a",)) == 1
    assert line_of(text, ("one", "b")) == 3
    assert line_of(text, ("many", 0, "c")) == 5
    assert line_of(text, ("many", 1, "c")) == 7
    assert line_of(text, ("many", 1, "d", "e")) == 8
    assert line_of(text, ("one", "two", "f")) == 10
    assert line_of(text, ("many", 1, "missing")) == 6
    assert line_of(text, ("nowhere",)) is None


def test_files_that_are_no_files(tmp_path: Path) -> None:
    cases = {
        "missing.toml": None,
        "binary.toml": b"\xff\xfe\x00",
        "broken.toml": b"a = \n",
        "huge.toml": b"#" * 1_100_000,
    }
    for name, content in cases.items():
        path = tmp_path / name
        if content is not None:
            path.write_bytes(content)
        with pytest.raises(ConfigRefused, match=name):
            load_sequence(str(path))
    with pytest.raises(ConfigRefused, match="cannot be read"):
        load_sequence(str(tmp_path))


def test_toml_faults_name_their_line(tmp_path: Path) -> None:
    path = tmp_path / "s.toml"
    path.write_text('title = "x"\n\nblocks == 3\n', encoding="utf-8")
    with pytest.raises(ConfigRefused) as caught:
        load_sequence(str(path))
    assert caught.value.line == 3


def test_what_is_loaded_is_the_file_with_its_digest() -> None:
    path = CONFIGS / "bench" / "instrument.toml"
    loaded = load_instrument(str(path))
    assert loaded.text == path.read_text(encoding="utf-8")
    assert loaded.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert loaded.settings.accelerating.nominal == 8000.0
    assert loaded.settings.interlocks.water.debounce == 2.0


def test_every_shipped_file_loads_and_plans() -> None:
    instrument = load_instrument(str(CONFIGS / "bench" / "instrument.toml")).settings
    sequences = [path for path in CONFIGS.glob("*/*.toml") if "ratios" in path.read_text(encoding="utf-8")]
    assert len(sequences) >= 4
    for path in sequences:
        assert plan_route(load_sequence(str(path)).settings, instrument).stations
    for path in CONFIGS.glob("*/sample.toml"):
        assert load_sample(str(path)).settings.components
    for path in CONFIGS.glob("faults/*.toml"):
        assert load_faults(str(path)).settings.faults


LINES = SEQUENCE.splitlines()


@settings(max_examples=250, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.data())
def test_a_mangled_file_is_settings_or_one_refusal(data: st.DataObject) -> None:
    lines = list(LINES)
    for _ in range(data.draw(st.integers(1, 4))):
        number = data.draw(st.integers(0, len(lines) - 1))
        match data.draw(st.integers(0, 3)):
            case 0:
                del lines[number]
            case 1:
                lines.insert(number, lines[data.draw(st.integers(0, len(lines) - 1))])
            case 2:
                lines[number] = data.draw(st.text(max_size=40))
            case _:
                key, equals, _ = lines[number].partition("=")
                value = data.draw(st.sampled_from(["true", '""', "[]", "{}", "-1", "1e400", '"8 kV"', "nan"]))
                lines[number] = f"{key}{equals}{value}"
    said = "Next: "
    try:
        parse_sequence("\n".join(lines), "my.toml")
    except ConfigRefused as refused:
        said = str(refused)
    assert "Next: " in said
