"""Typed settings whose quantities are written with their units: "8 kV", "250 ms", "15 ppm".

The field fixes the dimension; a bare number is refused where a unit is needed, a unit of another
dimension is refused everywhere. ``pint`` does the arithmetic and is imported when a file is loaded.
"""

from __future__ import annotations

import math
from functools import cache
from typing import TYPE_CHECKING, Annotated, Any

from pydantic import BaseModel, BeforeValidator, ConfigDict, model_validator

if TYPE_CHECKING:
    from pint import UnitRegistry


class Settings(BaseModel):
    """Frozen, complete and strict: an unknown key is an error, and so is nan or infinity."""

    model_config = ConfigDict(
        frozen=True, extra="forbid", allow_inf_nan=False, strict=False, str_strip_whitespace=True
    )

    @model_validator(mode="before")
    @classmethod
    def _no_truth_values(cls, data: Any) -> Any:
        """``true`` is not the number one."""
        if isinstance(data, dict):
            for name, value in data.items():
                field = cls.model_fields.get(name)
                if field is None:
                    continue
                if isinstance(value, bool) and field.annotation is not bool:
                    raise ValueError(f"{name} needs a number, not {value!r}")
        return data


@cache
def _registry() -> UnitRegistry:
    from pint import UnitRegistry  # noqa: PLC0415 - a quarter of a second; only needed with a file

    registry: UnitRegistry = UnitRegistry(autoconvert_offset_to_baseunit=True)
    registry.define("ppb = 1e-9")
    return registry


def parse_quantity(text: str, unit: str) -> float:
    """The value of ``text`` in ``unit``. Raises ValueError with a message for a person."""
    import pint  # noqa: PLC0415

    registry = _registry()
    number, _, suffix = text.strip().partition(" ")
    try:
        magnitude = float(number)
        unit_text = suffix.strip() or "dimensionless"
        given = registry.Quantity(magnitude, f"1{unit_text}" if unit_text.startswith("/") else unit_text)
        value = float(given.to(unit).magnitude)
    except pint.DimensionalityError:
        raise ValueError(f"{text!r} is not a quantity in {unit}") from None
    except (pint.PintError, ValueError, TypeError, AttributeError, AssertionError, OverflowError):
        raise ValueError(
            f"{text!r} is not a number, a space and a unit (expected something in {unit})"
        ) from None
    except Exception as error:  # noqa: BLE001 - a unit parser fed with anything fails in any way
        raise ValueError(f"{text!r} is not understood as a quantity in {unit}: {error}") from None
    if not math.isfinite(value):
        raise ValueError(f"{text!r} is not finite")
    return value


def _quantity(unit: str, example: str) -> BeforeValidator:
    def convert(value: object) -> float:
        if isinstance(value, str):
            return parse_quantity(value, unit)
        if value == 0 and not isinstance(value, bool):
            return 0.0  # zero is zero in any unit
        raise ValueError(f"needs a unit, for example {example!r}")

    return BeforeValidator(convert)


def _fraction(value: object) -> float:
    if isinstance(value, str):
        return parse_quantity(value, "dimensionless")
    if isinstance(value, int | float) and not isinstance(value, bool):
        return float(value)
    raise ValueError("needs a number, or a string such as '15 ppm' or '0.1 percent'")


Volts = Annotated[float, _quantity("V", "8 kV")]
Amps = Annotated[float, _quantity("A", "10 A")]
Tesla = Annotated[float, _quantity("T", "0.9 T")]
Seconds = Annotated[float, _quantity("s", "250 ms")]
Metres = Annotated[float, _quantity("m", "300 mm")]
Radians = Annotated[float, _quantity("rad", "90 deg")]
Pascals = Annotated[float, _quantity("Pa", "1e-5 Pa")]
Kelvin = Annotated[float, _quantity("K", "40 degC")]
Ohms = Annotated[float, _quantity("ohm", "1e11 ohm")]
Henries = Annotated[float, _quantity("H", "2 H")]
PerSecond = Annotated[float, _quantity("1/s", "400 kHz")]
VoltsPerSecond = Annotated[float, _quantity("V/s", "10 kV/s")]
AmpsPerSecond = Annotated[float, _quantity("A/s", "5 A/s")]
CubicMetresPerSecond = Annotated[float, _quantity("m**3/s", "6 l/min")]
ElectronVolts = Annotated[float, _quantity("eV", "5 eV")]
AtomicMass = Annotated[float, _quantity("u", "203.5 u")]
Fraction = Annotated[float, BeforeValidator(_fraction)]
