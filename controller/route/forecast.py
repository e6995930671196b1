"""What a sequence will take and give, without running it (pure).

Dead times are estimates from the instrument file: a voltage jump takes its slew and its settling, a
magnet move its ramp and the hold, plus what the eddy lag and the probe's loop were seen to take; the
jump that goes with a move is made while the field lands. The run reports the measured times beside them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from controller.config.instrument import Instrument
from controller.config.sequence import NormalisationSettings, RatioSettings, Sequence
from controller.physics.ions import parse_ion
from controller.physics.peak import peak_widths
from controller.route.dwell import counting_u, optimal_share
from controller.route.plan import Route, Station, Stop

LANDING_SECONDS = 2.0  # eddy lag and probe loop after a ramp; seen in rehearsals of the demo instrument
POINT_SECONDS = 0.25  # one point of a centring scan: gate, jump and read-back
CENTRING_POINTS = 21  # of a fine scan
# The electrometer's resistor forgets the beam before it by e for each time constant: from the largest peak
# to the smallest worth measuring (1e-4) at 1e-3 of it takes sixteen; for finding a peak, half will do.
ELECTROMETER_SETTLES = 16.0
WIDE_SPAN = 4e-3  # of mass: what dividers, radii and field law may be off before calibration


@dataclass(frozen=True, slots=True)
class RatioForecast:
    """Expected relative standard uncertainty of a ratio from counting alone, and the best dwells.

    ``best_seconds`` are those of ``labels``, the ions that the ratio is made of, in the same total time.
    """

    name: str
    labels: tuple[str, ...]
    u_relative: float
    best_u_relative: float
    best_seconds: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Forecast:
    """Times in s. ``dwell_seconds`` and ``dead_seconds`` are per cycle."""

    dwell_seconds: float
    dead_seconds: float
    centring_seconds: float
    start_seconds: float
    total_seconds: float
    expected_counts: dict[str, float]
    ratios: tuple[RatioForecast, ...]

    @property
    def duty(self) -> float:
        return self.dwell_seconds / (self.dwell_seconds + self.dead_seconds)


def forecast(route: Route, sequence: Sequence, instrument: Instrument) -> Forecast:
    """Times and counting statistics of a route."""
    run = sequence.run
    cycles = run.blocks * run.cycles_per_block
    dwell = sum(stop.dwell_seconds for stop in route.stops)
    dead = sum(_dead_seconds(route, instrument))
    centring = len(route.stations) * (LANDING_SECONDS + CENTRING_POINTS * POINT_SECONDS)
    start = _start_seconds(instrument) + len(route.stations) * _wide_points(instrument) * POINT_SECONDS
    centrings = 1 + (run.blocks - 1) // run.centre_every
    total = start + centrings * centring + cycles * (dwell + dead)
    rates = {item.ion: item.expected_rate for item in sequence.ions if item.expected_rate is not None}
    dwells = {stop.label: stop.dwell_seconds for stop in route.stops}
    return Forecast(
        dwell_seconds=dwell,
        dead_seconds=dead,
        centring_seconds=centring,
        start_seconds=start,
        total_seconds=total,
        expected_counts={label: rate * dwells[label] * cycles for label, rate in rates.items()},
        ratios=tuple(
            _ratio(f"{item.numerator}/{item.denominator}", parts, rates, dwells, cycles)
            for item in sequence.ratios
            if (parts := log_parts(item, sequence.normalisation)) and rates.keys() >= parts.keys()
        ),
    )


def log_parts(item: RatioSettings, normalisation: NormalisationSettings | None) -> dict[str, float]:
    """Coefficients c of ln y = sum c_k ln n_k + const, by ion; empty for the normalising ratio itself.

    With internal normalisation by the exponential law, y = (n_i/n_j)(m_i/m_j)^beta and
    beta = ln(R_N n_b/n_a)/ln(m_a/m_b): the normalising ions share in the ratio's counting noise.
    """
    parts = {item.numerator: 1.0, item.denominator: -1.0}
    if normalisation is not None and item.normalised:
        i, j, a, b = (
            parse_ion(label).neutral_u
            for label in (
                *(item.numerator, item.denominator),
                *(normalisation.numerator, normalisation.denominator),
            )
        )
        share = math.log(i / j) / math.log(a / b)
        parts[normalisation.numerator] = parts.get(normalisation.numerator, 0.0) - share
        parts[normalisation.denominator] = parts.get(normalisation.denominator, 0.0) + share
    return {label: part for label, part in parts.items() if abs(part) > 1e-12}


def _ratio(
    name: str, parts: dict[str, float], rates: dict[str, float], dwells: dict[str, float], cycles: int
) -> RatioForecast:
    coefficients = tuple(parts.values())
    n = [rates[label] for label in parts]
    t = [dwells[label] for label in parts]
    best = optimal_share(coefficients, n, [0.0] * len(n), sum(t))
    return RatioForecast(
        name=name,
        labels=tuple(parts),
        u_relative=counting_u(coefficients, n, t, cycles),
        best_u_relative=best.u_relative / math.sqrt(cycles),
        best_seconds=best.seconds,
    )


def _dead_seconds(route: Route, instrument: Instrument) -> list[float]:
    """Seconds without counting before each stop of a cycle, its first following the cycle's last."""
    stops = [(station, stop) for station in route.stations for stop in station.stops]
    answer = []
    for (station_before, before), (station, stop) in zip((stops[-1], *stops[:-1]), stops, strict=True):
        wait = _jump_seconds(before, stop, instrument)
        if station is not station_before:
            ramp, landing = _move_seconds(station_before, station, instrument)
            wait = ramp + max(landing, wait)
        answer.append(wait + _detector_seconds(stop, instrument))
    return answer


def _jump_seconds(before: Stop, stop: Stop, instrument: Instrument) -> float:
    accel = abs(stop.accel_volts - before.accel_volts) / instrument.accelerating.volts_per_second_max
    esa = abs(stop.esa_volts - before.esa_volts) / instrument.esa.volts_per_second_max
    settle = max(instrument.accelerating.settle, instrument.esa.settle)
    # the read-back that proves arrival comes with the next poll
    poll, tick = instrument.devices.accelerating.poll, instrument.interlocks.tick
    return max(accel, esa) + settle + 0.5 * (poll + tick)


def _detector_seconds(stop: Stop, instrument: Instrument) -> float:
    if stop.detector == "counter":
        return instrument.counter.settle
    return ELECTROMETER_SETTLES * instrument.electrometer.time_constant


def _move_seconds(before: Station, station: Station, instrument: Instrument) -> tuple[float, float]:
    """Ramp, and landing after it."""
    magnet = instrument.magnet
    ramp = abs(station.amps_estimate - before.amps_estimate) / magnet.amps_per_second_max
    return ramp, LANDING_SECONDS + magnet.field_hold


def _wide_points(instrument: Instrument) -> int:
    return round(2 * WIDE_SPAN / (0.4 * peak_widths(instrument.geometry).half_height)) + CENTRING_POINTS


def _start_seconds(instrument: Instrument) -> float:
    magnet, interlocks = instrument.magnet, instrument.interlocks
    ramp = magnet.amps_max / magnet.amps_per_second_max
    conditioning = magnet.conditioning_cycles * 2 * (ramp + magnet.conditioning_dwell)
    return max(interlocks.detector_vacuum_hold, interlocks.cover_hold) + conditioning + 5.0


def describe(route: Route) -> list[tuple[str, ...]]:
    """The route as rows of a plain table: station, field, stop, volts, dwell."""
    rows: list[tuple[str, ...]] = [("station", "field / T", "stop", "m/z", "V / V", "ESA / V", "dwell / s")]
    for station in route.stations:
        for place, stop in enumerate(station.stops):
            rows.append(_row(station if place == 0 else None, stop))
    return rows


def _row(station: Station | None, stop: Stop) -> tuple[str, ...]:
    return (
        station.name if station else "",
        f"{station.field_tesla:.6f}" if station else "",
        stop.label,
        f"{stop.mass_to_charge:.4f}",
        f"{stop.accel_volts:.2f}",
        f"{stop.esa_volts:.3f}",
        f"{stop.dwell_seconds:g}",
    )
