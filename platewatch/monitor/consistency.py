"""Does the filter know how wrong it is?  Statistics of innovations and errors.

NIS (innovations) needs readings only, NEES (errors) a simulation's truth.  Both are
chi-square when the filter's model is right; innovations are then white as well.
Source: Bar-Shalom, Li & Kirubarajan, Estimation with Applications to Tracking and
Navigation (2001), section 5.4, from memory.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from scipy.linalg import cho_factor, cho_solve, solve_triangular
from scipy.stats import binom, chi2, norm

from platewatch.errors import ShapeError
from platewatch.types import Array, Gaussian

CONFIDENCE = 0.95


class Fit(StrEnum):
    """What the average says of the covariance that the filter claims."""

    FITS = "fits"
    TOO_CONFIDENT = "too confident"  # errors larger than claimed: Q or R too small
    TOO_TIMID = "too timid"  # errors smaller than claimed: Q or R too large


def gate(dof: int, confidence: float) -> float:
    """The value that one NIS or NEES of `dof` degrees exceeds with 1 - confidence."""
    return float(chi2.ppf(confidence, dof))


def average_bounds(count: int, dof: int, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """Two-sided bounds of the mean of `count` independent chi-squares of `dof` degrees."""
    tail = (1 - confidence) / 2
    dofs = count * dof
    return float(chi2.ppf(tail, dofs)) / count, float(chi2.ppf(1 - tail, dofs)) / count


def nees(truth: Array, belief: Gaussian) -> float:
    """Squared error in units of the claimed covariance; truth (n,)."""
    error = truth - belief.mean
    return float(error @ cho_solve(cho_factor(belief.cov), error))


def whitened(residual: Array, S: Array) -> Array:
    """L^-1 residual with S = L L': unit variance and uncorrelated if S is right.  (m,)"""
    factor, lower = cho_factor(S, lower=True)
    return np.asarray(solve_triangular(factor, residual, lower=lower))


@dataclass(frozen=True)
class Consistency:
    """Averages over runs, step by step, against their chi-square bounds.

    mean: over all runs and steps;  inside: share of steps within the bounds
    """

    mean: float
    bounds: tuple[float, float]
    inside: float
    fit: Fit


def averages(values: Array, dof: int, confidence: float = CONFIDENCE) -> Consistency:
    """Judge NIS or NEES values (runs, steps) of equal degrees of freedom.

    The filter does not fit where fewer steps lie inside than chance explains (to one
    in a thousand, steps taken as independent); the mean tells on which side it errs.
    Raises ShapeError where there is no run or no step.
    """
    if values.ndim != 2 or not values.size:
        raise ShapeError(f"values of shape {values.shape} are not runs by steps")
    runs, steps = values.shape
    low, high = average_bounds(runs, dof, confidence)
    by_step = values.mean(axis=0)
    count = int(((by_step >= low) & (by_step <= high)).sum())
    fit = Fit.FITS
    if count < binom.ppf(0.001, steps, confidence):
        fit = Fit.TOO_CONFIDENT if by_step.mean() > dof else Fit.TOO_TIMID
    return Consistency(float(by_step.mean()), (low, high), count / steps, fit)


@dataclass(frozen=True)
class Whiteness:
    """Autocorrelation of whitened innovations.

    correlation (lags,) from lag 1;  bound: each lies within +-bound if they are white
    statistic, p_value: Ljung-Box over all lags
    """

    correlation: Array
    bound: float
    statistic: float
    p_value: float

    @property
    def white(self) -> bool:
        return self.p_value >= 1 - CONFIDENCE


def whiteness(innovations: Array, lags: int = 10, confidence: float = CONFIDENCE) -> Whiteness:
    """Are whitened innovations (steps, m) uncorrelated in time?

    Source: Ljung & Box, Biometrika 65 (1978) 297, from memory, summed over the m
    components, which whitening has made independent.
    Raises ShapeError where the sequence is not longer than the lags asked for.
    """
    rows = innovations[:, None] if innovations.ndim == 1 else innovations
    n, m = rows.shape
    if n <= lags:
        raise ShapeError(f"{n} innovations are too few for {lags} lags")
    power = (rows**2).sum(axis=0)
    by_part = np.array([(rows[k:] * rows[:-k]).sum(axis=0) / power for k in range(1, lags + 1)])
    weights = n * (n + 2) / (n - np.arange(1, lags + 1))
    statistic = float(weights @ (by_part**2).sum(axis=1))
    bound = float(norm.ppf(0.5 + confidence / 2) / np.sqrt(n * m))
    p_value = float(chi2.sf(statistic, lags * m))
    return Whiteness(by_part.mean(axis=1), bound, statistic, p_value)
