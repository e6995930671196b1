"""The empirical field law of the magnet: current to field and back, without history.

field = saturation * tanh(initial * amps / saturation). It is only the first guess of a step; the field
probe and what each visit teaches do the rest. It refuses outside its range.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from controller.config.instrument import MagnetSettings  # which checks itself with this law


class OutsideRange(ValueError):
    """The field law is not valid there."""


class MagnetModel:
    """Inverse and forward law within [field_min, field_max] and [0, amps_max]."""

    def __init__(self, settings: MagnetSettings) -> None:
        self._settings = settings

    def amps_for_tesla(self, tesla: float) -> float:
        """Current in A for a field in T. Raises OutsideRange."""
        settings = self._settings
        if not settings.field_min <= tesla <= settings.field_max:
            raise OutsideRange(f"{tesla:.6g} T is outside {settings.field_min:g} to {settings.field_max:g} T")
        amps = settings.saturation / settings.initial_tesla_per_amp * math.atanh(tesla / settings.saturation)
        if amps > settings.amps_max:
            raise OutsideRange(f"{tesla:.6g} T needs {amps:.4g} A, more than {settings.amps_max:g} A")
        return amps

    def tesla_for_amps(self, amps: float) -> float:
        """Field in T for a current in A. Raises OutsideRange."""
        settings = self._settings
        if not 0 <= amps <= settings.amps_max:
            raise OutsideRange(f"{amps:.4g} A is outside 0 to {settings.amps_max:g} A")
        return settings.saturation * math.tanh(settings.initial_tesla_per_amp * amps / settings.saturation)

    def tesla_per_amp(self, amps: float) -> float:
        """Slope of the law in T/A."""
        settings = self._settings
        share = math.tanh(settings.initial_tesla_per_amp * amps / settings.saturation)
        return settings.initial_tesla_per_amp * (1.0 - share * share)
