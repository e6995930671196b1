"""Field and voltage laws of the controller: closed forms, exact in special relativity.

Textbook sector optics: B r = p/q in the magnet; q E r = K (K + 2mc2)/(K + mc2) in the ESA. The relativistic
terms are parts in 1e8; they cost nothing and are a check that controller and simulator share no code.
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from controller.physics.constants import ATOMIC_MASS, ELEMENTARY_CHARGE, LIGHT_SPEED

if TYPE_CHECKING:
    from controller.config.instrument import Geometry  # which checks itself with these laws


def field_tesla(mass_kg: float, charge: int, volts: float, radius: float) -> float:
    """Field in T that bends an ion of energy charge * e * volts onto ``radius`` in m."""
    energy = charge * ELEMENTARY_CHARGE * volts
    momentum = math.sqrt(energy * (energy / LIGHT_SPEED**2 + 2.0 * mass_kg))
    return momentum / (charge * ELEMENTARY_CHARGE * radius)


def mass_to_charge(tesla: float, volts: float, radius: float) -> float:
    """Mass to charge in u on the axis of a single magnet (inverse of ``field_tesla``)."""
    momentum_per_charge = tesla * radius
    kg_per_coulomb = momentum_per_charge**2 / (2.0 * volts) - volts / (2.0 * LIGHT_SPEED**2)
    return kg_per_coulomb * ELEMENTARY_CHARGE / ATOMIC_MASS


def tracking_ratio(geometry: Geometry) -> float:
    """ESA volts per accelerating volt, k = 2 ln(r2/r1), for plates with r1 r2 = r_e squared."""
    return 4.0 * math.asinh(geometry.esa_gap / (2.0 * geometry.esa_radius))


def esa_volts(accel_volts: float, geometry: Geometry, *, source_offset: float, trim: float) -> float:
    """ESA plate difference in V that passes ions of the accelerating voltage and starting energy."""
    return tracking_ratio(geometry) * (accel_volts + source_offset) * (1.0 + trim)


def jump_volts(
    reference_volts: float, reference_mass_to_charge: float, mass_to_charge_u: float, source_offset: float
) -> float:
    """Accelerating volts that put another m/z on the axis at the same field: (m/z)(V + V0) constant."""
    total = (reference_volts + source_offset) * reference_mass_to_charge / mass_to_charge_u
    return total - source_offset
