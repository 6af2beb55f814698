"""Platinum resistance thermometer of 100 ohm: the Callendar-Van Dusen equation both ways.

Source: IEC 60751:2008 (the same in the edition of 2022), from memory.
"""

from __future__ import annotations

import numpy as np

from platewatch.types import Array

R0_OHM = 100.0
A = 3.9083e-3  # 1/K
B = -5.775e-7  # 1/K2
C = -4.183e-12  # 1/K4, below 0 degC only
RANGE_degC = (-200.0, 850.0)

_ROUNDING_OHM = 1e-9  # the ends of the range belong to it
_LONGEST_SEARCH = 20  # Newton on a nearly straight line settles in four


def resistance_ohm(degC: Array | float) -> Array:
    """Resistance, ohm; NaN outside -200..850 degC."""
    t = np.asarray(degC, dtype=np.float64)
    inside = (t >= RANGE_degC[0]) & (t <= RANGE_degC[1])
    return np.where(inside, _curve(t)[0], np.nan)


def temperature_degC(ohm: Array | float) -> Array:
    """Temperature from the resistance, ohm; NaN outside 18.52..390.48 ohm."""
    R = np.asarray(ohm, dtype=np.float64)
    lowest, highest = resistance_ohm(np.array(RANGE_degC))
    inside = (lowest <= R) & (highest >= R)
    wanted = np.where(inside, R, R0_OHM)
    t = (wanted / R0_OHM - 1.0) / A
    for _ in range(_LONGEST_SEARCH):
        value, slope = _curve(t)
        step = (value - wanted) / slope
        t = t - step
        if np.abs(step).max(initial=0.0) < 1e-10:
            break
    return np.where(inside, np.clip(t, *RANGE_degC), np.nan)


def _curve(t: Array) -> tuple[Array, Array]:
    """Resistance ohm and its slope ohm/K, without regard to the range."""
    cold = np.where(t < 0.0, C, 0.0)
    value = 1.0 + A * t + B * t**2 + cold * (t - 100.0) * t**3
    slope = A + 2.0 * B * t + cold * (4.0 * t - 300.0) * t**2
    return R0_OHM * value, R0_OHM * slope
