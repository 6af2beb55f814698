"""From the plate's temperature to what the bus shows: lag, noise, rounding, signal."""

from __future__ import annotations

import numpy as np

from platewatch.errors import SettingsError
from platewatch.thermal.plate import Sensor
from platewatch.units import TemperatureUnit, difference_from_K, from_degC

PT100_A, PT100_B = 3.9083e-3, -5.775e-7  # IEC 60751, 0 degC and above


def follow(tip: float, before: float, now: float, lag_s: float, step_s: float) -> float:
    """A first-order lag behind a temperature that moves straight from before to now.

    Exact for such an input: y = u - s*tau + (y0 - u0 + s*tau) exp(-dt/tau).
    """
    if lag_s <= 0.0:
        return now
    slope = (now - before) / step_s
    left = float(np.exp(-step_s / lag_s))
    return now - slope * lag_s + (tip - before + slope * lag_s) * left


def as_signal(sensor: Sensor, shown_degC: float) -> float:
    """What the channel carries, in the unit the description declares for it."""
    value = shown_degC - sensor.correction_K
    match sensor.signal:
        case "degC" | "degF" | "K":
            unit = TemperatureUnit(sensor.signal)
            quantum = difference_from_K(sensor.quantum_K, unit)
            return rounded(from_degC(value, unit), quantum)
        case "mA" if sensor.span_degC is not None:
            low, high = sensor.span_degC
            return 4.0 + 16.0 * (rounded(value, sensor.quantum_K) - low) / (high - low)
        case "ohm":
            t = rounded(value, sensor.quantum_K)
            return 100.0 * (1.0 + PT100_A * t + PT100_B * t * t)
    raise SettingsError(
        f"sensor {sensor.name}: the simulator cannot make a signal in {sensor.signal!r}; "
        "describe the sensor with degC, degF, K, ohm or mA for a simulated run"
    )


def rounded(value: float, quantum: float) -> float:
    """To the nearest step, free of the tail of binary fractions."""
    return round(round(value / quantum) * quantum, 9) if quantum > 0 else value
