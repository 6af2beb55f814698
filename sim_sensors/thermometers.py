"""From the plate's temperature to what the bus shows: lag, noise, rounding, signal."""

from __future__ import annotations

import numpy as np

from platewatch.errors import SettingsError
from platewatch.thermal.plate import Sensor
from platewatch.units import TemperatureUnit, from_degC
from sim_sensors.wires import voltage_mV

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


def as_signal(sensor: Sensor, shown_degC: float, terminals_degC: float) -> float:
    """What the channel carries for a shown temperature; NaN stays NaN.

    terminals_degC: where the thermocouple's wires end, used for a signal in mV
    Raises SettingsError for a signal that the simulator cannot make.
    """
    match sensor.signal:
        case "degC" | "degF" | "K":
            return round(from_degC(shown_degC, TemperatureUnit(sensor.signal)), 6)
        case "mA" if sensor.span_degC is not None:
            low, high = sensor.span_degC
            return 4.0 + 16.0 * (shown_degC - low) / (high - low)
        case "mV":
            return round(voltage_mV(sensor.element, shown_degC, terminals_degC), 6)
        case "ohm":
            return 100.0 * (1.0 + PT100_A * shown_degC + PT100_B * shown_degC**2)
    raise SettingsError(
        f"sensor {sensor.name}: the simulator cannot make a signal in {sensor.signal!r}; "
        "describe the sensor with degC, degF, K, mV, ohm or mA for a simulated run"
    )


def rounded(value: float, quantum: float) -> float:
    """To the nearest step, free of the tail of binary fractions; NaN stays NaN."""
    if quantum <= 0 or np.isnan(value):
        return value
    return round(round(value / quantum) * quantum, 9)
