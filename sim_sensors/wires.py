"""Thermocouple voltage for the simulated instruments, by a road of its own.

A cubic spline through published values of the reference functions (NIST Monograph
175, Burns et al. 1993, the same as IEC 60584-1:2013), good to 0.3 K from 0 to 400 degC.
"""

from __future__ import annotations

from functools import cache

from scipy.interpolate import CubicSpline

from platewatch.errors import SettingsError

DEGC = (-100.0, 0.0, 25.0, 100.0, 200.0, 300.0, 400.0)
MILLIVOLT = {
    "K": (-3.553631, 0.0, 1.000242, 4.096230, 8.138473, 12.208566, 16.397142),
    "J": (-4.632524, 0.0, 1.277288, 5.268916, 10.778746, 16.327206, 21.848065),
    "T": (-3.378582, 0.0, 0.991977, 4.278519, 9.288102, 14.861928, 20.871970),
    "N": (-2.406811, 0.0, 0.658646, 2.774124, 5.913415, 9.341152, 12.973686),
    "E": (-5.237184, 0.0, 1.495112, 6.318930, 13.421296, 21.036238, 28.945964),
}


@cache
def _spline(element: str) -> CubicSpline:
    if element not in MILLIVOLT:
        raise SettingsError(
            f"the simulator knows no voltage of element {element!r}, only {', '.join(MILLIVOLT)}; "
            "describe the sensor with a signal in degC for a simulated run"
        )
    return CubicSpline(DEGC, MILLIVOLT[element])


def voltage_mV(element: str, junction_degC: float, terminals_degC: float) -> float:
    """What the instrument measures between its terminals."""
    emf = _spline(element)
    return float(emf(junction_degC) - emf(terminals_degC))
