"""The train's optics against rays that are integrated here, independently, with scipy."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.stats import gamma

from simulator.beam import Beam
from simulator.constants import C_LIGHT, E_CHARGE, EV_PER_KELVIN
from simulator.optics import (
    NoFocus,
    angular_aberration,
    double_focus,
    drift,
    energy_density,
    esa,
    peak_table,
    sector_magnet,
)
from simulator.spec import OpticsSpec, SourceSpec, SpeciesSpec
from simulator.species import true_ion

A = OpticsSpec(
    esa_radius=0.25,
    esa_gap=0.015,
    esa_angle=math.pi / 2,
    magnet_radius=0.30,
    magnet_angle=math.pi / 2,
    source_slit=20e-6,
    energy_slit=1e-3,
    collector_slit=120e-6,
    half_angle=1e-6,
    radius_spread=0.0,
    tail_one_unit=0.0,
)


def ray(x0: float, slope: float, delta: float, gamma_: float) -> float:
    """Collector displacement in m of a ray, by integrating Newton's law in Cartesian coordinates.

    Units: the axis ion has m = 2, K = 1 (so v = 1), q = 1. ESA potential 2 ln(r/r_e) with sharp edges:
    the potential step acts along the path. Magnet: v/r_m = qB/m for the axis ion.
    """
    layout = double_focus(A)
    mass, kinetic = 2.0 * (1 + gamma_), 1.0 + delta
    speed = math.sqrt(2 * kinetic / mass)
    x = x0 + layout.source_to_esa * math.tan(slope)
    # --- ESA: centre at the origin, flight begins along +y at (r_e + x, 0)
    r = A.esa_radius + x
    inside = kinetic - 2 * math.log(r / A.esa_radius)
    radial = speed * math.sin(slope)
    along = math.sqrt(2 * inside / mass - radial**2)

    def in_esa(_: float, s: np.ndarray) -> list[float]:
        r2 = s[0] ** 2 + s[1] ** 2
        force = -2.0 / r2  # q E = 2/r, toward the centre, as a vector: -2 (x, y)/r^2
        return [s[2], s[3], force * s[0] / mass, force * s[1] / mass]

    def leaves_esa(_: float, s: np.ndarray) -> float:
        return math.atan2(s[1], s[0]) - A.esa_angle

    leaves_esa.terminal = True  # type: ignore[attr-defined]
    found = solve_ivp(
        in_esa, (0, 10), [r, 0.0, radial, along], method="DOP853", rtol=1e-12, atol=1e-14, events=leaves_esa
    )
    px, py, vx, vy = found.y[:, -1]
    r = math.hypot(px, py)
    radial = (px * vx + py * vy) / r
    total = kinetic  # the edge gives the potential back
    slope = math.asin(radial / math.sqrt(2 * total / mass))
    x = r - A.esa_radius + layout.esa_to_magnet * math.tan(slope)
    # --- magnet: entry face y = 0, centre of the axis' circle at the origin
    turn = 1.0 / A.magnet_radius * 2.0 / mass  # q B / m with q B = m_axis v / r_m

    def in_magnet(_: float, s: np.ndarray) -> list[float]:
        return [s[2], s[3], -turn * s[3], turn * s[2]]

    def leaves_magnet(_: float, s: np.ndarray) -> float:
        return math.atan2(s[1], s[0]) - A.magnet_angle

    leaves_magnet.terminal = True  # type: ignore[attr-defined]
    found = solve_ivp(
        in_magnet,
        (0, 10),
        [A.magnet_radius + x, 0.0, speed * math.sin(slope), speed * math.cos(slope)],
        method="DOP853",
        rtol=1e-12,
        atol=1e-14,
        events=leaves_magnet,
    )
    px, py, vx, vy = found.y[:, -1]
    r = math.hypot(px, py)
    slope = math.asin((px * vx + py * vy) / r / speed)
    return r - A.magnet_radius + layout.magnet_to_collector * math.tan(slope)


def slope_of(name: str, step: float) -> float:
    arguments = {"x0": 0.0, "slope": 0.0, "delta": 0.0, "gamma_": 0.0}
    return (ray(**{**arguments, name: step}) - ray(**{**arguments, name: -step})) / (2 * step)


def test_first_order_coefficients_agree_with_integrated_rays() -> None:
    layout = double_focus(A)
    assert layout.source_to_esa == pytest.approx(0.08760043986, abs=1e-10)
    assert layout.esa_to_magnet == pytest.approx(0.28760044, abs=1e-8)
    assert layout.magnet_to_collector == pytest.approx(0.45, abs=1e-12)
    assert slope_of("x0", 1e-5) == pytest.approx(layout.total[0, 0], rel=1e-5)
    assert abs(slope_of("slope", 1e-3)) < 1e-5
    assert abs(slope_of("delta", 1e-3)) < 1e-6
    assert slope_of("gamma_", 1e-3) == pytest.approx(layout.mass_dispersion, rel=1e-5)
    assert layout.mass_dispersion == pytest.approx(0.375, rel=1e-12)


def test_the_angular_aberration_agrees_with_integrated_rays() -> None:
    angle = 5e-3
    integrated = 0.5 * (ray(0, angle, 0, 0) + ray(0, -angle, 0, 0)) / angle**2
    assert angular_aberration(A, double_focus(A)) == pytest.approx(integrated, rel=1e-3)
    assert integrated == pytest.approx(0.25438, rel=1e-3)


def test_matrices_keep_phase_space() -> None:
    """Liouville: the (x, x') block of every element has determinant one."""
    for matrix in (drift(0.3), esa(0.25, 1.2), sector_magnet(0.3, 0.9)):
        assert np.linalg.det(matrix[:2, :2]) == pytest.approx(1.0, abs=1e-12)


def test_a_geometry_without_solution_is_refused() -> None:
    from dataclasses import replace

    with pytest.raises(NoFocus):
        double_focus(replace(A, magnet_radius=0.6))


def width_at(table, height: float) -> float:
    grid = np.linspace(-400e-6, 400e-6, 16001)
    values = np.array([table.at(float(x)) for x in grid])
    inside = grid[values >= height]
    return float(inside[-1] - inside[0])


def test_the_peak_is_the_convolution_of_the_slit_images() -> None:
    """A trapezoid: 5 % width 392 ppm, half height 320 ppm, flat top 240 ppm; against numpy's convolve."""
    table = peak_table(A, double_focus(A))
    step = 0.25e-6
    image, collector = np.ones(round(30e-6 / step)), np.ones(round(120e-6 / step))
    shape = np.convolve(image, collector) / len(image)
    for height, expected in ((0.05, 392e-6), (0.5, 320e-6), (0.999, 240e-6)):
        independent = (shape >= height).sum() * step / 0.375
        assert width_at(table, height) == pytest.approx(expected, rel=6e-3)
        assert width_at(table, height) == pytest.approx(independent, rel=8e-3)


def test_the_thermal_spread_is_that_of_a_flux() -> None:
    """scipy.stats.gamma with shape 2 is the flux-weighted energy from a hot surface; FWHM 2.446386 kT."""
    kt = EV_PER_KELVIN * 2000.0
    e = np.linspace(-1.0, 6.0, 70001)
    density = energy_density(e, SourceSpec("thermal", temperature=2000.0))
    reference = gamma(2, scale=kt).pdf(e + 2 * kt)
    assert np.allclose(density / density.max(), reference / reference.max(), atol=1e-9)
    above = e[density >= density.max() / 2]
    assert above[-1] - above[0] == pytest.approx(2.446386 * kt, rel=1e-3)
    assert 2.446386 * kt == pytest.approx(0.42163, rel=1e-4)


def beam() -> Beam:
    return Beam(
        A,
        SourceSpec("thermal", temperature=2000.0),
        [SpeciesSpec("88Sr+", 1e6)],
        nominal_volts=8000.0,
        rng=np.random.default_rng(1),
    )


def centre(at, low: float, high: float) -> float:
    grid = np.linspace(low, high, 8001)
    values = np.array([at(float(x)) for x in grid])
    inside = grid[values > 0.5 * values.max()]
    return 0.5 * float(inside[0] + inside[-1])


def test_the_esa_sets_the_mass_and_the_accelerating_voltage_only_the_transmission() -> None:
    train = beam()
    volts, plates = 8000.0, 2 * train.log_plates * 8000.34
    rest = centre(lambda tesla: train.rate(0.0, tesla, plates, volts), 0.40, 0.405)
    # the ESA 100 ppm high: the peak moves as a mass by 100 ppm, that is by 50 ppm of field
    moved = centre(lambda tesla: train.rate(0.0, tesla, plates * (1 + 1e-4), volts), 0.40, 0.405)
    assert moved / rest - 1 == pytest.approx(50e-6, abs=2e-6)
    # the accelerating voltage 0.1 % high: nothing moves ...
    still = centre(lambda tesla: train.rate(0.0, tesla, plates, volts * 1.001), 0.40, 0.405)
    assert still / rest - 1 == pytest.approx(0.0, abs=1e-6)
    # ... and a slit of 32 eV still passes all at 8 eV, half at 16 eV, nothing at 24 eV
    passed = [
        train.rate(0.0, rest, plates, volts + shift) / train.rate(0.0, rest, plates, volts)
        for shift in (8, 16, 24)
    ]
    assert passed[0] == pytest.approx(1.0, abs=1e-3)
    assert 0.2 < passed[1] < 0.8
    assert passed[2] < 1e-3


@pytest.mark.parametrize(("label", "ppb"), [("6Li+", 1427.92), ("238U+", 36.078)])
def test_the_axis_carries_the_relativistic_mass(label: str, ppb: float) -> None:
    """B^2 r^2/(E r_e) = gamma m/q: the apparent mass is high by K/(m c^2). Special relativity."""
    ion = true_ion(label)
    train = Beam(
        A,
        SourceSpec("thermal"),
        [SpeciesSpec(label, 1.0)],
        nominal_volts=8000.0,
        rng=np.random.default_rng(1),
    )
    effective = train._ions[0][0]
    assert (effective / ion.kg_per_coulomb - 1) * 1e9 == pytest.approx(ppb, abs=0.02)
    assert E_CHARGE * 8000.0 / (ion.kg * C_LIGHT**2) * 1e9 == pytest.approx(ppb, abs=0.02)
