"""Thermocouple voltages and temperatures on ITS-90, both ways, for all letter types.

The inverse solves the reference function itself (bracketed Newton, to 1e-9 K), not the
approximate inverse polynomials.  Outside the defined range the answer is NaN, and
`why_not` puts the reason in words: a broken sensor is an outcome, not an exception.
Source: NIST Monograph 175 / IEC 60584-1:2013, see `its90`.
"""

from __future__ import annotations

from functools import cache

import numpy as np

from platewatch.errors import SettingsError
from platewatch.monitor.its90 import K_BUMP, REFERENCE, Piece
from platewatch.types import Array

TYPES = tuple(REFERENCE)

# The voltage of type B falls to -2.6 uV at 21 degC and only leaves its values near 0 degC
# behind above 42 degC: below this temperature a voltage has two meanings or no resolution.
_READABLE_FROM_degC = {"B": 50.0}

_KNOT_SPACING_K = 1.0
_SETTLED_K = 1e-9
_ROUNDING_mV = 1e-9  # the ends of the range belong to it
_LONGEST_SEARCH = 60  # halvings of one kelvin reach 1e-18 K


def range_degC(letter: str) -> tuple[float, float]:
    """Where the reference function of a type is defined.

    Raises SettingsError for an unknown letter.
    """
    pieces = _pieces(letter)
    return pieces[0].low_degC, pieces[-1].high_degC


def readable_range_degC(letter: str) -> tuple[float, float]:
    """Where a voltage has one temperature: the defined range, for type B from 50 degC."""
    low, high = range_degC(letter)
    return _READABLE_FROM_degC.get(letter, low), high


def emf_mV(letter: str, degC: Array | float) -> Array:
    """Voltage against a reference junction at 0 degC, mV; NaN outside the range."""
    return _curve(letter, np.asarray(degC, dtype=np.float64))[0]


def seebeck_uV_K(letter: str, degC: Array | float) -> Array:
    """Slope of the reference function, uV/K; NaN outside the range."""
    return 1e3 * _curve(letter, np.asarray(degC, dtype=np.float64))[1]


def temperature_degC(
    letter: str, mV: Array | float, cold_junction_degC: Array | float = 0.0
) -> Array:
    """Temperature of the measuring junction from the voltage at the terminals.

    Voltages add, temperatures do not: the reference function at the terminals is added
    to the voltage before it is inverted.  NaN where that leaves the range.
    """
    emf = np.asarray(mV, dtype=np.float64) + emf_mV(letter, cold_junction_degC)
    table = _knots(letter)[1]
    answer = np.full(emf.shape, np.nan)
    inside = (emf >= table[0] - _ROUNDING_mV) & (emf <= table[-1] + _ROUNDING_mV)
    wanted = np.clip(emf[inside], table[0], table[-1])
    if wanted.size:
        answer[inside] = _solve(letter, wanted)
    return answer


def read_as(wire: str, set_as: str, degC: Array | float, terminals_degC: Array | float) -> Array:
    """What an instrument set to one type shows for a good junction of another."""
    at_terminals = emf_mV(wire, degC) - emf_mV(wire, terminals_degC)
    return temperature_degC(set_as, at_terminals, terminals_degC)


def why_not(letter: str, mV: float, cold_junction_degC: float = 0.0) -> str:
    """Why `temperature_degC` gives NaN for these values, in plain words; "" if it does not."""
    if not np.isfinite(mV):
        return f"{mV} mV is not a number"
    low, high = range_degC(letter)
    at_terminals = float(emf_mV(letter, cold_junction_degC))
    if np.isnan(at_terminals):
        return (
            f"the cold junction at {cold_junction_degC:g} degC is outside type {letter} "
            f"({low:g} to {high:g} degC)"
        )
    emf = mV + at_terminals
    knots, table = _knots(letter)
    if emf > table[-1] + _ROUNDING_mV:
        return f"{emf:.3f} mV is more than the {table[-1]:.3f} mV of type {letter} at {high:g} degC"
    if emf < table[0] - _ROUNDING_mV:
        low = knots[0]
        return f"{emf:.3f} mV is less than the {table[0]:.3f} mV of type {letter} at {low:g} degC"
    return ""


def _pieces(letter: str) -> tuple[Piece, ...]:
    try:
        return REFERENCE[letter]
    except KeyError:
        raise SettingsError(
            f"unknown thermocouple type {letter!r}; use one of {' '.join(TYPES)}"
        ) from None


def _curve(letter: str, degC: Array) -> tuple[Array, Array]:
    """Voltage mV and slope mV/K, of the shape of degC; a border belongs to the lower piece."""
    emf = np.full(degC.shape, np.nan)
    slope = np.full(degC.shape, np.nan)
    for piece in reversed(_pieces(letter)):
        inside = (degC >= piece.low_degC) & (degC <= piece.high_degC)
        if inside.any():
            emf[inside], slope[inside] = _polynomial(piece.coefficients, degC[inside])
            if letter == "K" and piece.low_degC >= 0.0:
                bump, bump_slope = _bump(degC[inside])
                emf[inside] += bump
                slope[inside] += bump_slope
    return emf, slope


def _polynomial(coefficients: tuple[float, ...], t: Array) -> tuple[Array, Array]:
    """Value and derivative by Horner's rule."""
    value = np.full(t.shape, coefficients[-1])
    slope = np.zeros(t.shape)
    for c in coefficients[-2::-1]:
        slope = slope * t + value
        value = value * t + c
    return value, slope


def _bump(t: Array) -> tuple[Array, Array]:
    away = t - K_BUMP.centre_degC
    height = K_BUMP.height_mV * np.exp(K_BUMP.rate_per_K2 * away**2)
    return height, 2.0 * K_BUMP.rate_per_K2 * away * height


@cache
def _knots(letter: str) -> tuple[Array, Array]:
    """Temperatures one kelvin apart and their voltages, rising: brackets for the inverse."""
    low, high = readable_range_degC(letter)
    knots = np.append(np.arange(low, high, _KNOT_SPACING_K), high)
    return knots, emf_mV(letter, knots)


def _solve(letter: str, emf: Array) -> Array:
    """The temperatures (m,) whose voltages are emf (m,), all inside the table of `_knots`.

    The bracket is one knot wider on either side than needed, so that rounding at a knot
    does not push Newton's step out of it.  A step that leaves it all the same is replaced
    by halving: that settles the jumps of some nanovolts between the published pieces.
    """
    knots, table = _knots(letter)
    right = np.searchsorted(table, emf)
    low = knots[np.maximum(right - 2, 0)]
    high = knots[np.minimum(right + 1, knots.size - 1)]
    t = np.interp(emf, table, knots)
    for _ in range(_LONGEST_SEARCH):
        value, slope = _curve(letter, t)
        error = value - emf
        low = np.where(error <= 0.0, t, low)
        high = np.where(error >= 0.0, t, high)
        newton = t - error / slope
        after = np.where((newton >= low) & (newton <= high), newton, 0.5 * (low + high))
        step, t = np.abs(after - t), after
        if step.max() < _SETTLED_K:
            break
    return t
