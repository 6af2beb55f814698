"""Heat that leaves a surface: natural and forced convection in air, and radiation.

Every coefficient is an average over the face, W/m2K, with air properties at the
film temperature (T + T_amb) / 2.  Sources, all from memory: Incropera & DeWitt,
Fundamentals of Heat and Mass Transfer, 7th ed., ch. 7 and sec. 9.6; McAdams (1954);
Lloyd & Moran (1974); Churchill & Chu (1975).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from platewatch.types import Array

STEFAN_BOLTZMANN = 5.670374419e-8  # W/m2K4, CODATA 2018
GRAVITY = 9.80665  # m/s2, standard
ZERO_DEGC_K = 273.15

TURBULENT_UP = 1e7  # Rayleigh number where the plate facing up turns turbulent
TURBULENT_FLOW = 5e5  # Reynolds number of transition along a flat plate

# Dry air at 1 atm: T K, kinematic viscosity 1e-6 m2/s, conductivity 1e-3 W/mK, Prandtl number.
# Source: Incropera & DeWitt, 7th ed., Table A.4, from memory.
_AIR = np.array(
    [
        (250, 11.44, 22.3, 0.720),
        (300, 15.89, 26.3, 0.707),
        (350, 20.92, 30.0, 0.700),
        (400, 26.41, 33.8, 0.690),
        (450, 32.39, 37.3, 0.686),
        (500, 38.79, 40.7, 0.684),
        (550, 45.57, 43.9, 0.683),
        (600, 52.69, 46.9, 0.685),
        (650, 60.21, 49.7, 0.690),
        (700, 68.10, 52.4, 0.695),
        (750, 76.37, 54.9, 0.702),
        (800, 84.93, 57.3, 0.709),
        (850, 93.80, 59.6, 0.716),
        (900, 102.9, 62.0, 0.720),
        (950, 112.2, 64.3, 0.723),
        (1000, 121.9, 66.7, 0.726),
    ]
)
_LOG_K, _LOG_NU, _LOG_CONDUCTIVITY = np.log(_AIR[:, :3] * (1.0, 1e-6, 1e-3)).T


class Air(NamedTuple):
    """nu m2/s, k W/mK, Pr and beta 1/K, each of the shape of the film temperature."""

    nu: Array
    k: Array
    Pr: Array
    beta: Array


def air(film_K: Array) -> Air:
    """Air at 1 atm, a power law between tabulated points; constant outside 250..1000 K.

    beta is that of an ideal gas, 1 / T, at any temperature.
    """
    log_K = np.log(film_K)
    return Air(
        nu=np.exp(np.interp(log_K, _LOG_K, _LOG_NU)),
        k=np.exp(np.interp(log_K, _LOG_K, _LOG_CONDUCTIVITY)),
        Pr=np.interp(film_K, _AIR[:, 0], _AIR[:, 3]),
        beta=1.0 / film_K,
    )


def nusselt_up(Ra: Array | float) -> Array:
    """Hot plate facing up: 0.54 Ra^(1/4) to 1e7 inclusive, 0.15 Ra^(1/3) above.

    As published the two branches differ by 6 % at 1e7.  Stated for 1e4..1e11 and used
    outside as well: a plate near the temperature of the room loses little either way.
    """
    Ra = np.asarray(Ra, dtype=np.float64)
    return np.where(Ra <= TURBULENT_UP, _laminar_up(Ra), _turbulent_up(Ra))


def nusselt_down(Ra: Array | float) -> Array:
    """Hot plate facing down: 0.27 Ra^(1/4), stated for 1e5..1e10."""
    return 0.27 * np.asarray(Ra, dtype=np.float64) ** 0.25


def nusselt_vertical(Ra: Array | float, Pr: Array | float) -> Array:
    """Vertical plate, laminar and turbulent in one (Churchill & Chu 1975)."""
    Ra = np.asarray(Ra, dtype=np.float64)
    prandtl = (1.0 + (0.492 / np.asarray(Pr, dtype=np.float64)) ** (9 / 16)) ** (8 / 27)
    return (0.825 + 0.387 * Ra ** (1 / 6) / prandtl) ** 2


def nusselt_forced(Re: Array | float, Pr: Array | float) -> Array:
    """Flow along a flat plate, averaged over its length.

    Laminar 0.664 Re^(1/2) Pr^(1/3) to Re = 5e5, then laminar followed by turbulent,
    (0.037 Re^(4/5) - 871) Pr^(1/3).  The two meet at 5e5 within 0.1 %.
    """
    Re, Pr = np.asarray(Re, dtype=np.float64), np.asarray(Pr, dtype=np.float64)
    mixed = 0.037 * np.maximum(Re, TURBULENT_FLOW) ** 0.8 - 871.0
    return np.where(Re <= TURBULENT_FLOW, 0.664 * np.sqrt(Re), mixed) * np.cbrt(Pr)


def rayleigh(T: Array | float, T_amb: Array | float, length_m: float) -> Array:
    """Rayleigh number of a plate at T in air at T_amb (degC), from |T - T_amb|."""
    return _natural(T, T_amb, length_m)[0]


def natural_up(T: Array | float, T_amb: Array | float, length_m: float) -> Array:
    """Face looking up, W/m2K; length_m is area / perimeter; T, T_amb in degC.

    A plate colder than the room behaves, face up, like a hot one facing down.  The
    published jump at Ra = 1e7 is spread smoothly over a factor of two around it, so
    that a steady solution exists at every power.  Zero where T equals T_amb.
    """
    Ra, gas, warmer = _natural(T, T_amb, length_m)
    return np.where(warmer, _nusselt_up_smooth(Ra), nusselt_down(Ra)) * gas.k / length_m


def natural_down(T: Array | float, T_amb: Array | float, length_m: float) -> Array:
    """Face looking down, W/m2K; `natural_up` with the roles of warm and cold exchanged."""
    Ra, gas, warmer = _natural(T, T_amb, length_m)
    return np.where(warmer, nusselt_down(Ra), _nusselt_up_smooth(Ra)) * gas.k / length_m


def vertical(T: Array | float, T_amb: Array | float, length_m: float) -> Array:
    """Upright face, W/m2K; length_m is its height.

    The correlation keeps 0.68 k / length_m of pure conduction where T equals T_amb;
    the heat flow is zero there all the same.
    """
    Ra, gas, _ = _natural(T, T_amb, length_m)
    return nusselt_vertical(Ra, gas.Pr) * gas.k / length_m


def forced(speed_m_s: float, T: Array | float, T_amb: Array | float, length_m: float) -> Array:
    """Air blown along the face, W/m2K; length_m is the length in the direction of flow.

    Natural convection is not added: below about 0.2 m/s the result is too small.
    """
    gas = air(_film_K(T, T_amb))
    return nusselt_forced(speed_m_s * length_m / gas.nu, gas.Pr) * gas.k / length_m


def radiation_flux(
    emissivity: Array | float, T_degC: Array | float, T_sur_degC: Array | float
) -> Array:
    """Net radiation of a small grey face to large surroundings, W/m2."""
    T_K = np.asarray(T_degC, dtype=np.float64) + ZERO_DEGC_K
    surroundings_K = np.asarray(T_sur_degC, dtype=np.float64) + ZERO_DEGC_K
    return emissivity * STEFAN_BOLTZMANN * (T_K**4 - surroundings_K**4)


def radiation_slope(emissivity: Array | float, T_degC: Array | float) -> Array:
    """Derivative of `radiation_flux` by the temperature of the face, W/m2K."""
    T_K = np.asarray(T_degC, dtype=np.float64) + ZERO_DEGC_K
    return 4.0 * emissivity * STEFAN_BOLTZMANN * T_K**3


def _laminar_up(Ra: Array) -> Array:
    return 0.54 * Ra**0.25


def _turbulent_up(Ra: Array) -> Array:
    return 0.15 * np.cbrt(Ra)


def _nusselt_up_smooth(Ra: Array) -> Array:
    """`nusselt_up` with a cubic ramp in log Ra between 1e7 / sqrt 2 and 1e7 * sqrt 2."""
    position = 0.5 + np.log2(np.maximum(Ra, 1.0) / TURBULENT_UP)
    step = np.clip(position, 0.0, 1.0)
    share = step * step * (3.0 - 2.0 * step)
    return (1.0 - share) * _laminar_up(Ra) + share * _turbulent_up(Ra)


def _film_K(T: Array | float, T_amb: Array | float) -> Array:
    both = np.asarray(T, dtype=np.float64) + np.asarray(T_amb, dtype=np.float64)
    return 0.5 * both + ZERO_DEGC_K


def _natural(
    T: Array | float, T_amb: Array | float, length_m: float
) -> tuple[Array, Air, np.ndarray[tuple[int, ...], np.dtype[np.bool_]]]:
    """Rayleigh number, air at the film temperature, and where the plate is the warmer."""
    gas = air(_film_K(T, T_amb))
    difference = np.asarray(T, dtype=np.float64) - np.asarray(T_amb, dtype=np.float64)
    Ra = GRAVITY * gas.beta * np.abs(difference) * length_m**3 * gas.Pr / gas.nu**2
    return Ra, gas, difference >= 0.0
