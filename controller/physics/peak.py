"""Peak widths that the controller expects from the drawn optics, as fractions of mass.

First-order optics of a double-focusing train (ESA image, then magnet): with the ESA at magnification
one, double focusing asks |M_m| = r_m / (2 r_e - r_m), and the dispersion at the collector is
D = (r_m / 2)(1 + |M_m|). A scanned peak is the box of the imaged source slit convolved with the box of
the collector slit. Textbook sector optics; aberrations are left to the measured peak.
"""

from __future__ import annotations

from typing import NamedTuple

from controller.config.instrument import Geometry


class PeakWidths(NamedTuple):
    """Full widths of the scanned peak and of the energy window, as fractions of mass and of energy."""

    base: float
    flat_top: float
    half_height: float
    edge: float
    energy_window: float


def peak_widths(geometry: Geometry) -> PeakWidths:
    """Widths from the slits. Raises ValueError where the geometry cannot focus in energy."""
    r_e, r_m = geometry.esa_radius, geometry.magnet_radius
    if r_m >= 2 * r_e:
        raise ValueError(f"no double focus: magnet radius {r_m} m is not below twice the ESA radius {r_e} m")
    magnification = r_m / (2 * r_e - r_m)
    dispersion = 0.5 * r_m * (1 + magnification)
    image, collector = magnification * geometry.source_slit, geometry.collector_slit
    return PeakWidths(
        base=(image + collector) / dispersion,
        flat_top=abs(image - collector) / dispersion,
        half_height=max(image, collector) / dispersion,
        edge=min(image, collector) / dispersion,
        energy_window=geometry.energy_slit / r_e,  # energy dispersion of the ESA image is r_e
    )
