"""What a face of the simulated plate loses to the room, W/m2.

Air follows Sutherland's law and the ideal gas (White, Viscous Fluid Flow, from
memory), so its properties come by another road than a property table.
"""

from __future__ import annotations

import numpy as np

from platewatch.thermal.plate import Correlation, Surface
from platewatch.types import Array
from platewatch.units import ABSOLUTE_ZERO_DEGC

SIGMA = 5.670374419e-8  # W/m2K4, CODATA 2018
GRAVITY = 9.80665
GAS_CONSTANT_AIR = 287.05  # J/kgK
CP_AIR = 1008.0  # J/kgK
PRESSURE = 101_325.0


def air(film_K: Array) -> tuple[Array, Array]:
    """Kinematic viscosity (m2/s) and conductivity (W/mK) of dry air at 1 atm."""
    mu = 1.716e-5 * (film_K / 273.15) ** 1.5 * (273.15 + 110.4) / (film_K + 110.4)
    k = 0.0241 * (film_K / 273.15) ** 1.5 * (273.15 + 194.0) / (film_K + 194.0)
    rho = PRESSURE / (GAS_CONSTANT_AIR * film_K)
    return mu / rho, k


def natural_convection(
    surface_degC: Array, ambient_degC: float, length_m: float, faces_up: bool
) -> Array:
    """Coefficient of a horizontal face, W/m2K; length = area / perimeter.

    A warm face up or a cold face down sheds its air: Nu = 0.54 Ra^(1/4), above
    its crossing 0.15 Ra^(1/3); the other way round Nu = 0.27 Ra^(1/4).  Taking
    the larger of the two branches avoids the jump at Ra = 1e7.
    Source: McAdams 1954; Lloyd & Moran 1974, from memory.
    """
    excess = surface_degC - ambient_degC
    film = (surface_degC + ambient_degC) / 2 - ABSOLUTE_ZERO_DEGC
    nu, k = air(film)
    alpha = nu * k / _mu_cp(film)
    rayleigh = GRAVITY * np.abs(excess) * length_m**3 / (film * nu * alpha)
    free = np.maximum(0.54 * rayleigh**0.25, 0.15 * np.cbrt(rayleigh))
    kept = 0.27 * rayleigh**0.25
    sheds = (excess >= 0) if faces_up else (excess < 0)
    return np.asarray(np.where(sheds, free, kept) * k / length_m)


def _mu_cp(film_K: Array) -> Array:
    """mu * cp, so that alpha = nu k / (mu cp)."""
    nu, _ = air(film_K)
    return nu * PRESSURE / (GAS_CONSTANT_AIR * film_K) * CP_AIR


def forced_convection(
    surface_degC: Array, ambient_degC: float, length_m: float, speed_m_s: float
) -> Array:
    """Mean coefficient of a flat plate in a stream, W/m2K; length along the stream.

    Laminar to Re = 5e5, mixed above.  Source: Incropera sec. 7.2, from memory.
    """
    film = (surface_degC + ambient_degC) / 2 - ABSOLUTE_ZERO_DEGC
    nu, k = air(film)
    reynolds = speed_m_s * length_m / nu
    prandtl = _mu_cp(film) / k
    laminar = 0.664 * np.sqrt(reynolds)
    mixed = 0.037 * reynolds**0.8 - 871.0
    nusselt = np.where(reynolds < 5e5, laminar, mixed) * np.cbrt(prandtl)
    return np.asarray(nusselt * k / length_m)


def radiation(surface_degC: Array, surroundings_degC: float, emissivity: float) -> Array:
    """Net exchange with large surroundings, W/m2."""
    hot = surface_degC - ABSOLUTE_ZERO_DEGC
    cold = surroundings_degC - ABSOLUTE_ZERO_DEGC
    return np.asarray(emissivity * SIGMA * (hot**4 - cold**4))


def correlated_loss(
    surface: Surface,
    surface_degC: Array,
    ambient_degC: float,
    surroundings_degC: float,
    emissivity: float,
    lengths_m: tuple[float, float],
    factor: float,
) -> Array:
    """Loss (n,) W/m2 of a face described by a correlation.

    lengths_m: area / perimeter, and the length along a stream
    factor: on the convection, the truth's own deviation from the correlation
    """
    match surface.correlation:
        case Correlation.FORCED:
            h = forced_convection(
                surface_degC, ambient_degC, lengths_m[1], surface.speed_m_s or 0.0
            )
        case correlation:
            up = correlation is Correlation.NATURAL_UP
            h = natural_convection(surface_degC, ambient_degC, lengths_m[0], up)
    convection = factor * h * (surface_degC - ambient_degC)
    return np.asarray(convection + radiation(surface_degC, surroundings_degC, emissivity))
