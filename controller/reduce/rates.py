"""From gates to rates on the counter's scale, with their counting variances.

Dead time is taken out gate by gate, before anything is subtracted: it acts on the total rate. An
electrometer's volt-seconds become ions per second by V = I R and are divided by its yield relative to
the counter. Its variance is shot noise plus resistor noise averaged by a boxcar of length T, whose
noise bandwidth is 1/(2 T):  var(V) = 2 k T_K R / T  (not 4 k T_K R / T, which overstates by root 2).
"""

from __future__ import annotations

import numpy as np

from controller.config.instrument import CounterSettings, ElectrometerSettings
from controller.physics.constants import BOLTZMANN, ELEMENTARY_CHARGE
from controller.reduce.deadtime import Array, true_rate_variances, true_rates
from controller.reduce.observations import Observations


def counter_rates(
    pulses: Array, live_seconds: Array, settings: CounterSettings, dead_seconds: float
) -> tuple[Array, Array]:
    """True rates (1/s) and counting variances (1/s^2) a gate; NaN beyond what dead time allows."""
    rates = true_rates(pulses / live_seconds, dead_seconds, settings.dead_time_kind)
    return rates, true_rate_variances(rates, live_seconds, dead_seconds, settings.dead_time_kind)


def electrometer_rates(
    volt_seconds: Array, live_seconds: Array, settings: ElectrometerSettings, gain: float
) -> tuple[Array, Array]:
    """Ions per second on the counter's scale, and their variances (1/s^2), a gate."""
    per_volt = 1.0 / (settings.resistance * ELEMENTARY_CHARGE * gain)
    rates = volt_seconds / live_seconds * per_volt
    johnson = 2.0 * BOLTZMANN * settings.kelvin * settings.resistance / live_seconds * per_volt**2
    shot = np.clip(rates, 0.0, None) / (gain * live_seconds)
    return rates, johnson + shot


def dwell_rates(
    seen: Observations,
    counter: CounterSettings,
    electrometer: ElectrometerSettings,
    *,
    dead_seconds: float,
    gain: float,
) -> tuple[Array, Array]:
    """Live-weighted mean rate of each dwell and its counting variance."""
    counting = np.array([stop.detector == "counter" for stop in seen.stops], dtype=bool)
    by_counter = counting[seen.stop][seen.gate_dwell]
    live = np.where(seen.gate_live > 0, seen.gate_live, np.nan)
    rates, variances = np.empty_like(live), np.empty_like(live)
    for chosen, (rate, variance) in (
        (by_counter, counter_rates(seen.gate_total, live, counter, dead_seconds)),
        (~by_counter, electrometer_rates(seen.gate_total, live, electrometer, gain)),
    ):
        rates[chosen], variances[chosen] = rate[chosen], variance[chosen]
    count = len(seen.block)
    total = np.bincount(seen.gate_dwell, live, count)
    mean = np.bincount(seen.gate_dwell, rates * live, count) / total
    variance = np.bincount(seen.gate_dwell, variances * live**2, count) / total**2
    return mean, variance
