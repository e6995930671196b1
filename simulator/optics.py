"""Forward optics of the double-focusing train: which share of an ion beam reaches the collector.

First order by matrices, plus the second-order angular aberration, which is found by following two rays
through the sharp-cut-off fields once, when the plant is built. The ESA alone selects the energy, so the
mass on the axis is set by B^2 and the ESA voltage, exactly in special relativity; the accelerating
voltage only has to keep the beam inside the energy slit.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from simulator.constants import C_LIGHT, EV_PER_KELVIN
from simulator.spec import OpticsSpec, SourceSpec

Matrix = NDArray[np.float64]
ROOT2 = math.sqrt(2.0)
GRID = 4001


def drift(length: float) -> Matrix:
    """(x, x', delta, gamma) over a field-free length in m."""
    matrix = np.eye(4)
    matrix[0, 1] = length
    return matrix


def esa(radius: float, angle: float) -> Matrix:
    """Cylindrical ESA with sharp edges; energy steps at the edges included. Textbook sector optics."""
    p = ROOT2 * angle
    matrix = np.eye(4)
    matrix[0] = [math.cos(p), radius / ROOT2 * math.sin(p), radius / 2 * (1 - math.cos(p)), 0]
    matrix[1] = [-ROOT2 / radius * math.sin(p), math.cos(p), math.sin(p) / ROOT2, 0]
    return matrix


def sector_magnet(radius: float, angle: float) -> Matrix:
    """Homogeneous magnet, normal entry and exit. Textbook sector optics."""
    c, s = math.cos(angle), math.sin(angle)
    matrix = np.eye(4)
    matrix[0] = [c, radius * s, radius / 2 * (1 - c), radius / 2 * (1 - c)]
    matrix[1] = [-s / radius, c, s / 2, s / 2]
    return matrix


class Layout(NamedTuple):
    """Drift lengths in m, and the whole train's first-order coefficients."""

    source_to_esa: float
    esa_to_magnet: float
    magnet_to_collector: float
    magnification: float
    mass_dispersion: float
    energy_dispersion_at_slit: float
    total: Matrix


class NoFocus(ValueError):
    """No lengths make this pair of sectors focus in angle and energy at once."""


def double_focus(spec: OpticsSpec) -> Layout:
    """Lengths for angular focus of each sector and for energy focus of the whole. Raises NoFocus.

    The ESA images at magnification -1; then r_m (1 + |M_m|) = |M_m| 2 r_e gives M_m.
    """
    r_e, r_m = spec.esa_radius, spec.magnet_radius
    if r_m >= 2 * r_e:
        raise NoFocus(f"magnet radius {r_m} m is not below twice the ESA radius {r_e} m")
    first = r_e / ROOT2 / math.tan(ROOT2 * spec.esa_angle / 2)
    magnification = r_m / (2 * r_e - r_m)
    g, f = r_m / math.tan(spec.magnet_angle), r_m / math.sin(spec.magnet_angle)
    image = g + f * magnification  # |M| = (l'' - g)/f, and (l' - g)(l'' - g) = f^2
    obj = g + f / magnification
    total = (
        drift(image)
        @ sector_magnet(r_m, spec.magnet_angle)
        @ drift(first + obj)
        @ esa(r_e, spec.esa_angle)
        @ drift(first)
    )
    at_slit = drift(first) @ esa(r_e, spec.esa_angle) @ drift(first)
    return Layout(
        first, first + obj, image, float(total[0, 0]), float(total[0, 3]), float(at_slit[0, 2]), total
    )


def angular_aberration(spec: OpticsSpec, layout: Layout, angle: float = 5e-3) -> float:
    """(x:aa) in m per rad squared, from two rays of opposite angle through the sharp fields."""
    rays = [_trace(spec, layout, sign * angle) for sign in (1.0, -1.0)]
    return 0.5 * (rays[0] + rays[1]) / angle**2


def _trace(spec: OpticsSpec, layout: Layout, angle: float) -> float:
    """Displacement in m at the collector of a ray of the axis' mass and energy."""
    offset, slope = layout.source_to_esa * math.tan(angle), angle
    offset, slope = _through_esa(spec, offset, slope)
    offset += layout.esa_to_magnet * math.tan(slope)
    offset, slope = _through_magnet(spec, offset, slope)
    return offset + layout.magnet_to_collector * math.tan(slope)


def _through_esa(spec: OpticsSpec, offset: float, slope: float, steps: int = 2000) -> tuple[float, float]:
    """Orbit u(angle), u = 1/r, in the field E r = const with the energy step at the edges.

    With K = 1 on the axis (q E r = 2), K at entry is 1 - 2 ln(r/r_e); u'' = -u + (q E r / m h^2) / u.
    """
    r_e = spec.esa_radius
    r = r_e + offset
    kinetic = 1.0 - 2.0 * math.log(r / r_e)
    # m = 2, so that v^2 = K; the edge's field acts along the path and leaves the radial speed alone
    radial = math.sin(slope)
    tangential = math.sqrt(kinetic - radial * radial)
    h = tangential * r  # angular momentum per unit mass
    strength = 1.0 / (h * h)  # q E r / m h^2 with q E r = 2, m = 2
    u, du = 1.0 / r, -radial / tangential / r
    step = spec.esa_angle / steps

    def pull(value: float) -> float:
        return strength / value - value

    for _ in range(steps):
        a1, b1 = du, pull(u)
        a2, b2 = du + step / 2 * b1, pull(u + step / 2 * a1)
        a3, b3 = du + step / 2 * b2, pull(u + step / 2 * a2)
        a4, b4 = du + step * b3, pull(u + step * a3)
        u += step / 6 * (a1 + 2 * a2 + 2 * a3 + a4)
        du += step / 6 * (b1 + 2 * b2 + 2 * b3 + b4)
    radial = -h * du
    return 1.0 / u - r_e, math.atan2(radial, math.sqrt(1.0 - radial * radial))


def _through_magnet(spec: OpticsSpec, offset: float, slope: float) -> tuple[float, float]:
    """Exact circle through a sharp homogeneous sector with normal faces."""
    r, angle = spec.magnet_radius, spec.magnet_angle
    # entry face along the radius; centre of curvature of the axis at the origin, entry at (r, 0)
    x, y = r + offset, 0.0
    centre_x, centre_y = x - r * math.cos(slope), y + r * math.sin(slope)
    # leave where the circle meets the exit face, the ray at ``angle`` from the origin
    ux, uy = math.cos(angle), math.sin(angle)
    along = centre_x * ux + centre_y * uy
    across = centre_x**2 + centre_y**2 - along**2
    radius_out = along + math.sqrt(r * r - across)
    out_x, out_y = radius_out * ux - centre_x, radius_out * uy - centre_y
    # direction of flight: the tangent, turned from the outward normal of the circle
    flight_x, flight_y = -out_y / r, out_x / r
    return radius_out - r, math.atan2(flight_x * ux + flight_y * uy, -flight_x * uy + flight_y * ux)


class Table(NamedTuple):
    """A function on a uniform grid, looked up by straight lines; zero outside."""

    low: float
    per_step: float
    values: tuple[float, ...]

    def at(self, x: float) -> float:
        place = (x - self.low) * self.per_step
        if not 0.0 <= place < len(self.values) - 1:
            return 0.0
        index = int(place)
        values = self.values
        return values[index] + (place - index) * (values[index + 1] - values[index])


def _box(grid: NDArray[np.float64], width: float) -> NDArray[np.float64]:
    """Unit-area box, with its edge cells shared so that its width is exact on any grid."""
    step = grid[1] - grid[0]
    cover = np.clip((width / 2 - np.abs(grid)) / step + 0.5, 0.0, 1.0)
    return np.asarray(cover / cover.sum())


def peak_table(spec: OpticsSpec, layout: Layout) -> Table:
    """Share of a beam inside the collector slit against its mass offset (m - m_axis)/m_axis.

    Box of the imaged source slit, box of the collector slit, and the one-sided density of the
    aberration of a uniformly filled angle.
    """
    image = abs(layout.magnification) * spec.source_slit
    reach = angular_aberration(spec, layout) * spec.half_angle**2
    half = 0.6 * (image + spec.collector_slit) + 2.0 * abs(reach)
    x = np.linspace(-half, half, GRID)
    beam = np.convolve(_box(x, image), _aberration(x, reach), mode="same")
    seen = np.convolve(beam, _box(x, spec.collector_slit), mode="same")
    seen = seen / (_box(x, spec.collector_slit).max() * beam.sum())
    # a heavier ion lands outward, at D gamma; the table is asked with gamma. seen[k] is the share when the
    # slit's centre lies at x[k] from the axial ray, which then lies at -x[k] from the slit: mirror
    scale = layout.mass_dispersion
    shares = tuple(np.clip(seen[::-1], 0.0, 1.0).tolist())
    return Table(float(x[0] / scale), float(scale / (x[1] - x[0])), shares)


def _aberration(x: NDArray[np.float64], reach: float) -> NDArray[np.float64]:
    """Density of u = C a^2 for uniform a: 1/(2 sqrt(u C a_max^2)) on one side, integrated per cell."""
    step = x[1] - x[0]
    if abs(reach) < step:
        return _box(x, 0.0)
    side = x * math.copysign(1.0, reach)
    upper = np.sqrt(np.clip((side + step / 2) / abs(reach), 0.0, 1.0))
    lower = np.sqrt(np.clip((side - step / 2) / abs(reach), 0.0, 1.0))
    density = upper - lower
    return np.asarray(density / density.sum())


def energy_table(spec: OpticsSpec, layout: Layout, source: SourceSpec, nominal_volts: float) -> Table:
    """Share of a beam through the energy slit against its mean offset in eV at the nominal energy.

    The offset is that of the beam's mean energy from the energy that the ESA passes.
    """
    per_ev = layout.energy_dispersion_at_slit / nominal_volts  # m per eV
    slit = spec.energy_slit / per_ev
    image = spec.source_slit / per_ev  # the ESA images its slit at magnification -1
    half = slit + 12.0 * energy_sigma(source) + 5.0
    e = np.linspace(-half, half, GRID)
    beam = np.convolve(energy_density(e, source), _box(e, image), mode="same")
    seen = np.convolve(beam, _box(e, slit), mode="same") / _box(e, slit).max()
    # seen[k] is the share when the slit's centre lies at e[k] from the beam's mean: mirror for the offset
    return Table(float(e[0]), float(1.0 / (e[1] - e[0])), tuple(np.clip(seen[::-1], 0.0, 1.0).tolist()))


def mean_start_energy(source: SourceSpec) -> float:
    """Mean starting energy in eV: 2 kT of a flux from a hot surface."""
    return 2.0 * EV_PER_KELVIN * source.temperature if source.kind == "thermal" else 0.0


def energy_sigma(source: SourceSpec) -> float:
    """Standard deviation of the starting energy in eV."""
    if source.kind == "thermal":
        return ROOT2 * EV_PER_KELVIN * source.temperature
    return source.energy_fwhm / 2.3548200450309493


def energy_density(e: NDArray[np.float64], source: SourceSpec) -> NDArray[np.float64]:
    """Unit-sum density of energy about its mean: flux from a hot surface, or a normal distribution."""
    if source.kind == "thermal":
        kt = EV_PER_KELVIN * source.temperature
        absolute = np.clip(e + 2.0 * kt, 0.0, None)
        density = absolute / kt * np.exp(-absolute / kt)
    else:
        density = np.exp(-0.5 * (e / energy_sigma(source)) ** 2)
    return np.asarray(density / density.sum())


def gamma_factor(kg: float, joules: float) -> float:
    """1 + K/(m c^2)."""
    return 1.0 + joules / (kg * C_LIGHT**2)
