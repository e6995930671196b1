"""Quantities with units, against pint itself; and what is no quantity."""

from __future__ import annotations

import contextlib
import math

import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from controller.config.units import (
    Count,
    Flag,
    Fraction,
    Kelvin,
    Number,
    Seconds,
    Settings,
    Text,
    Volts,
    parse_quantity,
)

PINT = pint.UnitRegistry(autoconvert_offset_to_baseunit=True)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("8 kV", "V", 8000.0),
        ("250 ms", "s", 0.25),
        ("20 ns", "s", 2e-8),
        ("90 deg", "rad", math.pi / 2),
        ("15 ppm", "dimensionless", 15e-6),
        ("0.1 %", "dimensionless", 1e-3),
        ("0.25", "dimensionless", 0.25),
        ("8kV", "V", 8000.0),
        ("1/s", "1/s", 1.0),
        ("5 mrad", "rad", 5e-3),
        ("5 eV", "eV", 5.0),
        ("1e-5 mbar", "Pa", 1e-3),
        ("0.1 percent", "dimensionless", 1e-3),
        ("6 l/min", "m**3/s", 1e-4),
        ("400 kHz", "1/s", 4e5),
        ("4e5 /s", "1/s", 4e5),
        ("203.5 u", "u", 203.5),
        ("5 A/s", "A/s", 5.0),
        ("20 um", "m", 2e-5),
    ],
)
def test_unit_strings_mean_what_pint_says(text: str, unit: str, value: float) -> None:
    assert parse_quantity(text, unit) == pytest.approx(value, rel=1e-12)
    number, _, suffix = text.partition(" ")
    if suffix and not suffix.startswith("/"):
        reference = PINT.Quantity(float(number), suffix).to(unit).magnitude
        assert parse_quantity(text, unit) == pytest.approx(reference, rel=1e-12)


def test_a_temperature_scale_has_an_offset() -> None:
    """40 degrees Celsius are 313.15 K: definition of the scale."""
    assert parse_quantity("40 degC", "K") == pytest.approx(313.15)


class Example(Settings):
    volts: Volts = 1.0
    wait: Seconds = 0.0
    warm: Kelvin = 300.0
    share: Fraction = 0.0
    count: Count = 1
    flag: Flag = True
    pure: Number = 1.0
    name: Text = "n"


@pytest.mark.parametrize(
    ("key", "value", "says"),
    [
        ("volts", 8000, "needs a unit, for example '8 kV'"),
        ("volts", "8 A", "not a quantity in V"),
        ("volts", "8 floops", "'floops' is not a known unit; write for example '8 kV'"),
        ("volts", "8", "has no unit"),
        ("volts", "eight V", "not a number, a space and a unit"),
        ("volts", "8 V**9**9**9", "not a number, a space and a unit"),
        ("volts", "1 9**9**9**9 V", "not a number, a space and a unit"),
        ("volts", "8" * 1000 + " V", "not a number, a space and a unit"),
        ("volts", "nan V", "not finite"),
        ("volts", "inf V", "not finite"),
        ("volts", True, "needs a unit"),
        ("count", True, "valid integer"),
        ("count", "1", "valid integer"),
        ("flag", 1, "valid boolean"),
        ("flag", "yes", "valid boolean"),
        ("pure", True, "needs a number"),
        ("pure", "1", "needs a number"),
        ("pure", 10**400, "too large"),
        ("pure", math.inf, "finite"),
        ("name", 3, "valid string"),
        ("name", "a\nb", "one line"),
        ("share", True, "needs a number"),
        ("share", 10**400, "too large"),
        ("share", "3 V", "is not a share"),
        ("share", "90 deg", "is not a share"),  # an angle is dimensionless to pint
        ("share", [1], "needs a number"),
    ],
)
def test_what_is_no_quantity_is_said(key: str, value: object, says: str) -> None:
    with pytest.raises(ValidationError, match=says):
        Example.model_validate({key: value})


@pytest.mark.parametrize(("text", "unit"), [("10 rpm", "1/s"), ("50 percent", "rad"), ("5 V", "eV")])
def test_what_has_the_dimension_but_another_meaning_is_refused(text: str, unit: str) -> None:
    """To pint angles and shares are alike: a rate in turns would be off by 2 pi."""
    with pytest.raises(ValueError, match="is not a quantity in"):
        parse_quantity(text, unit)


def test_zero_needs_no_unit_and_a_share_may_be_a_number() -> None:
    example = Example.model_validate({"volts": 0, "share": 0.25})
    assert (example.volts, example.share) == (0.0, 0.25)


def test_settings_are_frozen() -> None:
    with pytest.raises(ValidationError):
        Example().volts = 2.0  # type: ignore[misc]


@settings(max_examples=300, deadline=None, derandomize=True)
@given(
    st.one_of(
        st.text(max_size=30),
        st.from_regex(r"[0-9.e+-]{1,6} ?[A-Za-z%/*0-9 ^]{0,12}", fullmatch=True),
    ),
    st.sampled_from(["V", "s", "K", "1/s", "dimensionless"]),
)
def test_any_text_is_a_number_or_a_value_error(text: str, unit: str) -> None:
    with contextlib.suppress(ValueError):
        assert math.isfinite(parse_quantity(text, unit))
