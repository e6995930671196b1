"""Typed settings whose quantities are written with their units: "8 kV", "250 ms", "15 ppm".

The field fixes the dimension; a bare number is refused where a unit is needed, a unit of another
dimension is refused everywhere. ``pint`` does the arithmetic and is imported when a file is loaded.

What reaches ``pint`` is filtered first, because it evaluates expressions: "1 9**9**9**9 V" would never
return. It also counts angles and shares alike as dimensionless, so that "90 deg" would pass for a
share and "10 rpm" for a rate: here the base units must be the same, not only the dimensions.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import cache, lru_cache
from typing import TYPE_CHECKING, Annotated, Any

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    GetCoreSchemaHandler,
    Strict,
)
from pydantic_core import CoreSchema, core_schema

if TYPE_CHECKING:
    from pint import UnitRegistry


class Settings(BaseModel):
    """Frozen and complete: an unknown key is an error, and so is nan or infinity."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False, str_strip_whitespace=True)


class FaultAt(ValueError):
    """What a check across several keys found, and the key (below the checked table) to correct."""

    def __init__(self, message: str, *path: str | int) -> None:
        super().__init__(message)
        self.path = path


LONGEST = 60  # characters of a quantity
_NAME = r"(?:[A-Za-zµμΩ]+|%)(?:(?:\*\*|\^)-?[1-9]|[²³])?"
_QUANTITY = re.compile(
    r"([+-]?(?:\d+\.?\d*|\.\d+|inf|nan)(?:[eE][+-]?\d+)?)"
    rf"\s*((?:1?\s*/\s*)?{_NAME}(?:\s*[*/·\s]\s*{_NAME})*|)",
    re.ASCII,
)
_SHARES = {"": 1.0, "%": 1e-2, "percent": 1e-2, "permille": 1e-3, "ppm": 1e-6, "ppb": 1e-9}


@cache
def _registry() -> UnitRegistry:
    from pint import UnitRegistry  # noqa: PLC0415 - a quarter of a second; only needed with a file

    registry: UnitRegistry = UnitRegistry(autoconvert_offset_to_baseunit=True)
    return registry


@lru_cache(maxsize=512)  # a file writes the same quantities again and again
def parse_quantity(text: str, unit: str) -> float:
    """The value of ``text`` in ``unit``. Raises ValueError with a message for a person."""
    parts = _QUANTITY.fullmatch(text.strip()) if len(text) <= LONGEST else None
    if parts is None:
        raise ValueError(f"{_short(text)} is not a number, a space and a unit")
    number, suffix = float(parts.group(1)), parts.group(2)
    if unit == "dimensionless":
        if suffix not in _SHARES:
            raise ValueError(f"{text!r} is not a share: its unit must be ppm, ppb, percent, % or none")
        value = number * _SHARES[suffix]
    else:
        value = _converted(text, number, suffix, unit)
    if not math.isfinite(value):
        raise ValueError(f"{text!r} is not finite")
    return value


def _converted(text: str, number: float, suffix: str, unit: str) -> float:
    import pint  # noqa: PLC0415

    registry = _registry()
    if not suffix:
        raise ValueError(f"{text!r} has no unit")
    try:
        given = registry.Quantity(number, f"1{suffix}" if suffix.startswith("/") else suffix)
        same = given.to_base_units().units == registry.Quantity(1.0, unit).to_base_units().units
        value = float(given.to(unit).magnitude) if same else math.nan
    except pint.UndefinedUnitError:
        raise ValueError(f"{text!r}: {suffix!r} is not a known unit") from None
    except (pint.PintError, ValueError, TypeError, AttributeError, OverflowError):
        raise ValueError(f"{text!r} is not a quantity in {unit}") from None
    if not same:
        raise ValueError(f"{text!r} is not a quantity in {unit}")
    return value


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= LONGEST else f"{text[:LONGEST]}..."


@dataclass(frozen=True, slots=True)
class Quantity:
    """Marks a field as a quantity in ``unit``, read from texts like ``example``."""

    unit: str
    example: str

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.no_info_before_validator_function(self._convert, handler(source))

    def _convert(self, value: object) -> float:
        if isinstance(value, str):
            try:
                return parse_quantity(value, self.unit)
            except ValueError as error:
                raise ValueError(f"{error}; write for example {self.example!r}") from None
        if value == 0 and not isinstance(value, bool):
            return 0.0  # zero is zero in any unit
        raise ValueError(f"needs a unit, for example {self.example!r}")


def _number(value: object) -> float:
    if isinstance(value, int | float) and not isinstance(value, bool):
        try:
            return float(value)
        except OverflowError:
            raise ValueError("is too large") from None
    raise ValueError("needs a number")


def _fraction(value: object) -> float:
    if isinstance(value, str):
        return parse_quantity(value, "dimensionless")
    if isinstance(value, int | float) and not isinstance(value, bool):
        return _number(value)
    raise ValueError("needs a number, or a string such as '15 ppm' or '0.1 percent'")


def _text(value: str) -> str:
    if not value or not value.isprintable():
        raise ValueError("needs a text of one line")
    return value


Volts = Annotated[float, Quantity("V", "8 kV")]
Amps = Annotated[float, Quantity("A", "10 A")]
Tesla = Annotated[float, Quantity("T", "0.9 T")]
Seconds = Annotated[float, Quantity("s", "250 ms")]
Metres = Annotated[float, Quantity("m", "300 mm")]
Radians = Annotated[float, Quantity("rad", "90 deg")]
Pascals = Annotated[float, Quantity("Pa", "1e-5 Pa")]
Kelvin = Annotated[float, Quantity("K", "40 degC")]
Ohms = Annotated[float, Quantity("ohm", "1e11 ohm")]
Henries = Annotated[float, Quantity("H", "2 H")]
PerSecond = Annotated[float, Quantity("1/s", "400 kHz")]
VoltsPerSecond = Annotated[float, Quantity("V/s", "10 kV/s")]
AmpsPerSecond = Annotated[float, Quantity("A/s", "5 A/s")]
CubicMetresPerSecond = Annotated[float, Quantity("m**3/s", "6 l/min")]
ElectronVolts = Annotated[float, Quantity("eV", "5 eV")]
AtomicMass = Annotated[float, Quantity("u", "203.5 u")]
Fraction = Annotated[float, BeforeValidator(_fraction)]
Number = Annotated[float, BeforeValidator(_number)]  # pure number: `true` and "1" are not
Count = Annotated[int, Strict()]
Flag = Annotated[bool, Strict()]
Text = Annotated[str, AfterValidator(_text)]
