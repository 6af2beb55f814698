"""What can be said of the field from the same thermocouples without a model of the plate.

Each method is linear in the readings: weights (n_places, ns), built once.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.interpolate import RBFInterpolator
from scipy.linalg import cho_factor, cho_solve
from scipy.spatial.distance import cdist

from platewatch.types import Array

LENGTHS = np.geomspace(0.05, 2.0, 12)  # of the Gaussian process, times the plate's extent
NUGGETS = (1e-4, 1e-2, 1e-1)  # variance of a reading's noise over that of the process

Interpolator = Callable[[Array], Array]


def interpolators(
    sensors: Array, places: Array, extent_m: float, noise_var: Array
) -> dict[str, Interpolator]:
    """By name; each takes readings (ns,) degC to temperatures (n,) at the places.

    sensors (ns, 2), places (n, 2) m;  noise_var (ns,) K2
    """
    return {
        "nearest": _linear(_nearest(sensors, places)),
        "inverse distance": _linear(_inverse_distance(sensors, places)),
        "thin-plate spline": _linear(_thin_plate(sensors, places)),
        "Gaussian process": _gaussian_process(sensors, places, extent_m),
    }


def _linear(weights: Array) -> Interpolator:
    return lambda readings: np.asarray(weights @ readings)


def _nearest(sensors: Array, places: Array) -> Array:
    return np.asarray(np.eye(len(sensors))[cdist(places, sensors).argmin(axis=1)])


def _inverse_distance(sensors: Array, places: Array) -> Array:
    """Shepard (1968), power 2."""
    weights = 1 / np.maximum(cdist(places, sensors), 1e-9) ** 2
    return np.asarray(weights / weights.sum(axis=1, keepdims=True))


def _thin_plate(sensors: Array, places: Array) -> Array:
    """Duchon (1977); a thin-plate spline through the readings."""
    spline = RBFInterpolator(sensors, np.eye(len(sensors)), kernel="thin_plate_spline")
    return np.asarray(spline(places))


def _gaussian_process(sensors: Array, places: Array, extent_m: float) -> Interpolator:
    """Squared-exponential process about an unknown mean; length scale and noise share
    by maximum likelihood at each instant (Rasmussen & Williams 2006, sec. 2.7, 5.4)."""
    near, far = cdist(sensors, sensors), cdist(places, sensors)
    ns = len(sensors)
    ones = np.ones(ns)
    models = []
    for length in LENGTHS * extent_m:
        for nugget in NUGGETS:
            cov = np.exp(-0.5 * (near / length) ** 2) + nugget * np.eye(ns)
            factor = cho_factor(cov)
            inverse = cho_solve(factor, np.eye(ns))
            mean = (inverse @ ones) / (ones @ inverse @ ones)
            kept = inverse @ (np.eye(ns) - np.outer(ones, mean))
            weights = np.exp(-0.5 * (far / length) ** 2) @ kept + mean
            log_det = 2 * float(np.log(np.diag(factor[0])).sum())
            log_det += float(np.log(ones @ inverse @ ones))
            models.append((kept, weights, log_det))

    def fit(readings: Array) -> Array:
        def misfit(model: tuple[Array, Array, float]) -> float:
            kept, _, log_det = model
            variance = float(readings @ kept @ readings) / (ns - 1)
            return (ns - 1) * float(np.log(max(variance, 1e-9))) + log_det

        return np.asarray(min(models, key=misfit)[1] @ readings)

    return fit
