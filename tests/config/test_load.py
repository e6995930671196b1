"""Every fault of a file is one refusal that names place, value, limit and the next action."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from controller.config.faults import Faults
from controller.config.instrument import Instrument
from controller.config.load import (
    MAX_BYTES,
    line_at,
    line_of,
    load_faults,
    load_instrument,
    load_sample,
    load_sequence,
    parse,
)
from controller.config.sample import Sample
from controller.config.sequence import Sequence
from controller.errors import ConfigRefused, ExitCode
from controller.route.plan import plan_route

CONFIGS = Path(__file__).parents[2] / "configs"


def text_of(*parts: str) -> str:
    return CONFIGS.joinpath(*parts).read_text(encoding="utf-8")


INSTRUMENT = text_of("bench", "instrument.toml")
SEQUENCE = text_of("strontium", "sequence.toml")
SAMPLE = text_of("strontium", "sample.toml")
FAULT = (
    '[[faults]]\nkind = "cover open"\nat = "3 s"\n\n[[faults]]\nkind = "no reply"\nat = "4 s"\nrole = "esa"\n'
)
# (text, old, new, the key that must be named, words of the problem); the line is that of ``new``
INSTRUMENT_FAULTS = [
    ('nominal = "8 kV"', 'nominal = "9 kV"', "accelerating.nominal", "above volts_max 8200 V"),
    ('esa_gap = "15 mm"', 'esa_gap = "15 V"', "geometry.esa_gap", "not a quantity in m"),
    ('esa_gap = "15 mm"', "esa_gap = 15", "geometry.esa_gap", "needs a unit, for example '300 mm'"),
    ('esa_gap = "15 mm"', 'esa_gap = "15 m"', "geometry.esa_gap", "limit: at most 0.2"),
    ('esa_gap = "15 mm"', 'esa_gap = "0 m"', "geometry.esa_gap", "limit: above 0"),
    ('esa_gap = "15 mm"', "esa_gap = true", "geometry.esa_gap", "needs a unit"),
    ('esa_gap = "15 mm"', 'esa_gpa = "15 mm"', "geometry.esa_gpa", "did you mean 'esa_gap'?"),
    ('esa_angle = "90 deg"', 'esa_angle = "90 percent"', "geometry.esa_angle", "not a quantity in rad"),
    ('jump_span = "15 percent"', 'jump_span = "15 deg"', "accelerating.jump_span", "is not a share"),
    ('magnet_radius = "300 mm"', 'magnet_radius = "600 mm"', "geometry.magnet_radius", "no double focus"),
    ('safe_amps = "0.05 A"', 'safe_amps = "11 A"', "magnet.safe_amps", "must be below amps_max 10.5 A"),
    ('field_min = "0.05 T"', 'field_min = "0.9 T"', "magnet.field_min", "must be below field_max"),
    ('field_max = "0.9 T"', 'field_max = "5 T"', "magnet.field_max", "must be below saturation"),
    ('field_max = "0.9 T"', 'field_max = "1.1 T"', "magnet.field_max", "that amps_max gives"),
    ('compliance = "40 V"', 'compliance = "20 V"', "magnet.compliance", "that takes 21 V"),
    ("conditioning_cycles = 3", "conditioning_cycles = 3.0", "magnet.conditioning_cycles", "integer"),
    ("conditioning_cycles = 3", "conditioning_cycles = true", "magnet.conditioning_cycles", "integer"),
    ('source_offset = "0.34 V"', 'source_offset = "-9 kV"', "accelerating.source_offset", "at least -100"),
    ('volts_max = "1 kV"', 'volts_max = "900 V"', "esa.volts_max", "the ESA then needs 983.9 V"),
    ('detector_volts = "2.2 kV"', 'detector_volts = "2.6 kV"', "counter.detector_volts", "2500 V"),
    ('rate_max = "3 MHz"', 'rate_max = "60 MHz"', "counter.rate_max", "times the dead time is 1.2"),
    ('stale_after = "200 ms"', 'stale_after = "60 ms"', "devices.analyser_gauge.stale_after", "two polls"),
    ('serial = "ESA-0001"', 'serial = "ACC-0001"', "devices.esa.serial", "the same serial 'ACC-0001'"),
    ('address = "sim:water"', 'address = "line-2"', "devices.water.address", "does not go with kind"),
    ('kind = "simulated"', 'kind = "imaginary"', "kind", "limit: 'simulated' or 'hardware'"),
    ('name = "bench"', 'name = "two\\nlines"', "name", "a text of one line"),
    ("late_reply = 0.0", "late_reply = -1", "simulation.late_reply", "at least 0"),
    ("late_reply = 0.0", f"late_reply = {'9' * 400}", "simulation.late_reply", "too large"),
    ("garbled_reply = 0.0", "garbled_reply = nan", "simulation.garbled_reply", "finite"),
    ("eddy_seconds = [0.06, 0.3, 1.5]", "eddy_seconds = [0.06]", "simulation.eddy_seconds", "same length"),
    (
        'analyser_vacuum = { permit = "3e-4 Pa"',
        'analyser_vacuum = { permit = "3e-3 Pa"',
        "interlocks.analyser_vacuum.permit",
        "must be below trip 0.001 Pa",
    ),
    (
        'water = { permit = "4 l/min"',
        'water = { permit = "2 l/min"',
        "interlocks.water.permit",
        "must be above trip",
    ),
]
SEQUENCE_FAULTS = [
    ("blocks = 4", 'blocks = "4"', "run.blocks", "integer"),
    ("blocks = 4", "blocks = 0", "run.blocks", "limit: at least 1"),
    ("centre_every = 1", "cycels = 1", "run.cycels", "did you mean 'cycles_per_block'?"),
    ('gate = "2 s"', 'gate = "0 s"', "run.gate", "at least 0.001"),
    ('ion = "84Sr+"', 'ion = "84Xx+"', "ions[0].ion", "not in the table of nuclides"),
    ('ion = "84Sr+"', 'ion = "strontium"', "ions[0].ion", "is not an ion label"),
    ('ion = "85Rb+"', 'ion = "84Sr+"', "ions[1].ion", "named twice: 84Sr+"),
    ('name = "above 88"', 'name = "below 84"', "backgrounds[2].name", "named twice: below 84"),
    ('name = "above 88"', 'name = ""', "backgrounds[2].name", "a text of one line"),
    ('numerator = "87Sr+"', 'numerator = "89Sr+"', "ratios[0].numerator", "not an ion of this sequence"),
    ('denominator = "86Sr+"', 'denominator = "87Sr+"', "ratios[0].denominator", "87Sr+ by itself"),
    ('numerator = "84Sr+"', 'numerator = "87Sr+"', "ratios[1].numerator", "named twice: 87Sr+/86Sr+"),
    ('monitor = "85Rb+"', 'monitor = "87Sr+"', "interferences[0].monitor", "lies on itself"),
    ('interfering = "87Rb+"', 'interfering = "85Rb+"', "interferences[0].interfering", "does not lie on"),
    ('denominator = "88Sr+"', 'denominator = "86Sr+"', "normalisation.denominator", "by itself"),
    ("value = 0.1194", "value = '0.1194'", "normalisation.value", "needs a number"),
    ('dwell = "4 s"', 'dwell = "-4 s"', "ions[3].dwell", "limit: above 0"),
    ('dwell = "4 s"', 'dwell = "4 h"', "ions[3].dwell", "limit: at most 3600"),
    ('law = "exponential"', 'law = "wishful"', "normalisation.law", "limit: 'exponential'"),
]
SAMPLE_FAULTS = [
    ('rate = "680 kHz"', "rate = 680e3", "components[0].rate", "needs a unit"),
    ('rate = "680 kHz"', 'rate = "680 rpm"', "components[0].rate", "not a quantity in 1/s"),
    ('"84Sr+" = 0.0565', '"84Sx+" = 0.0565', "components[0].ions.84Sx+", "not in the table"),
    ('"87Rb+" = 0.3856', '"87Rb+" = -0.3856', "components[1].ions.87Rb+", "above zero"),
    ('kind = "thermal"', 'kind = "laser"', "source.kind", "limit: 'thermal' or 'plasma'"),
]
FAULT_FAULTS = [
    ('kind = "cover open"', 'kind = "cover shut"', "faults[0].kind", "not one of the choices"),
    ('role = "esa"', 'role = "eas"', "faults[1].role", "one of magnet"),
    ('at = "3 s"', 'at = "3 s"\nrole = "esa"', "faults[0].role", "takes another role: none"),
    ('at = "3 s"', 'at = "3 s"\nsize = 0.1', "faults[0].size", "has no size"),
    ('at = "4 s"', 'at = "-4 s"', "faults[1].at", "at least 0"),
]
CASES: list[tuple[type[Any], str, tuple[str, str, str, str]]] = [
    *((Instrument, INSTRUMENT, fault) for fault in INSTRUMENT_FAULTS),
    *((Sequence, SEQUENCE, fault) for fault in SEQUENCE_FAULTS),
    *((Sample, SAMPLE, fault) for fault in SAMPLE_FAULTS),
    *((Faults, FAULT, fault) for fault in FAULT_FAULTS),
]


@pytest.mark.parametrize(("model", "text", "fault"), CASES)
def test_a_fault_is_one_line_that_names_place_key_and_next_action(
    model: type[Any], text: str, fault: tuple[str, str, str, str]
) -> None:
    old, new, key, says = fault
    start = text.index(old)
    with pytest.raises(ConfigRefused) as caught:
        parse(text[:start] + new + text[start + len(old) :], "my.toml", model)
    found = caught.value
    assert found.key == key
    assert found.line == text[:start].count("\n") + 1 + new.count("\n")
    assert says in str(found)
    assert str(found).startswith(f"CONFIG REFUSED my.toml, line {found.line}; key {key}")
    assert "Next: " in str(found)
    assert len(str(found).splitlines()) == 1
    assert len(str(found)) < 400
    assert found.exit_code is ExitCode.CONFIG_REFUSED


@pytest.mark.parametrize(
    ("model", "text", "gone", "key", "stands_in"),
    [
        (Sequence, SEQUENCE, "blocks = 4\n", "run.blocks", "[run]"),
        (Sequence, SEQUENCE, 'ion = "86Sr+"\n', "ions[2].ion", "[[ions]]"),
        (Instrument, INSTRUMENT, 'serial = "DHV-0001"\n', "devices.detector.serial", "[devices.detector]"),
        (Instrument, INSTRUMENT, 'kind = "simulated"\n', "kind", "# The demo instrument"),
        (Faults, FAULT, 'role = "esa"\n', "faults[1].role", "[[faults]]"),
    ],
)
def test_a_missing_key_names_the_table_it_is_missed_in(
    model: type[Any], text: str, gone: str, key: str, stands_in: str
) -> None:
    with pytest.raises(ConfigRefused) as caught:
        parse(text.replace(gone, "", 1), "my.toml", model)
    assert caught.value.key == key
    assert caught.value.line is not None
    assert text.splitlines()[caught.value.line - 1].startswith(stands_in)
    # the last table of that name before the gap
    assert text[: text.index(gone)].count("\n") + 1 >= caught.value.line


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
    assert line_at(text, "many[1].c") == 7


def test_lines_are_found_among_tables_of_tables_quotes_and_long_texts() -> None:
    text = (
        'a = """\n[one]\nb = 2\n"""\n[[x]] # first\n[x.y]\n"q.r+" = 1\n'
        "[[x]]\n[x.y]\n'q.r+' = 2\n[[x.z]]\nw.v = 3\n[[x.z]]\nw.v = 4\n# [[x]]\n"
    )
    assert line_of(text, ("one", "b")) is None
    assert line_of(text, ("x", 0, "y", "q.r+")) == 7
    assert line_of(text, ("x", 1, "y", "q.r+")) == 10
    assert line_of(text, ("x", 1, "z", 1, "w", "v")) == 14


def test_a_long_odd_line_costs_no_time() -> None:
    assert line_of("a" * 500_000 + "!\n[" + " " * 500_000 + "\nb = 1\n", ("b",)) == 3


def test_files_that_are_no_files(tmp_path: Path) -> None:
    cases = {
        "missing.toml": (None, "no such file"),
        "binary.toml": (b"a = 1\n\xff\xfe\x00", "line 2; is not UTF-8"),
        "broken.toml": (b"\na = \n", "line 2; is not TOML"),
        "huge.toml": (b"#" * (MAX_BYTES + 1), "too large for a settings file"),
        "deep.toml": (b"b = 1\na = " + b"[" * 20_000, "line 2; is not TOML"),
        "long.toml": (b"\n\na = " + b"9" * 5_000, "line 3; is not TOML"),
        "nul\0.toml": (None, "cannot be read"),
        ".": (None, "cannot be read"),
    }
    for name, (content, says) in cases.items():
        path = tmp_path / name
        if content is not None:
            path.write_bytes(content)
        with pytest.raises(ConfigRefused) as caught:
            load_sequence(str(path))
        assert says in str(caught.value), name
        assert caught.value.file == str(path)
        assert caught.value.next_action


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
    loaders: dict[str, Callable[[str], Any]] = {
        "sample": load_sample,
        "instrument": load_instrument,
        "sequence": load_sequence,
        "one-hour": load_sequence,
    }
    seen = 0
    for path in sorted(CONFIGS.glob("*/*.toml")):
        settings_ = (load_faults if path.parent.name == "faults" else loaders[path.stem])(str(path)).settings
        seen += 1
        if isinstance(settings_, Sequence):
            assert plan_route(settings_, instrument).stations
            assert (path.parent / settings_.instrument).is_file()
            assert settings_.sample is not None
            assert (path.parent / settings_.sample).is_file()
    assert seen >= 13


def test_the_strontium_sample_agrees_with_its_convention() -> None:
    """What normalises a run must be true of the sample, or every ratio is off by design."""
    sequence = load_sequence(str(CONFIGS / "strontium" / "sequence.toml")).settings
    sample = load_sample(str(CONFIGS / "strontium" / "sample.toml")).settings
    ions = sample.components[0].ions
    assert sequence.normalisation is not None
    assert ions["86Sr+"] / ions["88Sr+"] == pytest.approx(sequence.normalisation.value, rel=1e-12)


FUZZED = {Sequence: SEQUENCE, Instrument: INSTRUMENT, Sample: SAMPLE, Faults: FAULT}
ODD = [
    "true",
    '""',
    "[]",
    "{}",
    "-1",
    "0",
    "1e400",
    '"8 kV"',
    "nan",
    '"0 s"',
    "1979-05-27",
    "[[1]]",
    '"\\u2028"',
]


@settings(max_examples=400, deadline=None, suppress_health_check=[HealthCheck.too_slow], derandomize=True)
@given(st.data())
def test_a_mangled_file_is_settings_or_one_refusal(data: st.DataObject) -> None:
    model = data.draw(st.sampled_from(list(FUZZED)))
    lines = FUZZED[model].splitlines()
    for _ in range(data.draw(st.integers(1, 3))):
        number = data.draw(st.integers(0, len(lines) - 1))
        match data.draw(st.integers(0, 3)):
            case 0:
                lines[number] = ""
            case 1:
                lines.insert(number, lines[data.draw(st.integers(0, len(lines) - 1))])
            case 2:
                lines[number] = data.draw(st.text(max_size=40))
            case _:
                key, equals, _ = lines[number].partition("=")
                lines[number] = f"{key}{equals}{data.draw(st.sampled_from(ODD))}"
    text, refused = "\n".join(lines), None
    try:
        made = parse(text, "my.toml", model)
    except ConfigRefused as error:
        refused = error
    if refused is None:
        assert isinstance(made, model)
        return
    assert refused.file == "my.toml"
    assert refused.line is not None
    assert 1 <= refused.line <= len(text.split("\n"))
    assert len(str(refused).splitlines()) == 1
