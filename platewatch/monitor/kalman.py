"""The Kalman filter itself: predict and update.  Knows no plate."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg.lapack import dpotrf, dpotrs

from platewatch.errors import ShapeError
from platewatch.types import Array, Gaussian

LOG_2PI = float(np.log(2 * np.pi))


@dataclass(frozen=True)
class Innovation:
    """What the readings said against what was expected of them.

    rows: which observations were there;  residual (m,);  S (m, m) its covariance
    nis: residual' S^-1 residual, chi-square with m degrees of freedom
    log_likelihood: ln p(z | past)
    """

    rows: tuple[int, ...]
    residual: Array
    S: Array
    nis: float
    log_likelihood: float


def predict(posterior: Gaussian, F: Array, Q: Array, push: Array | float = 0.0) -> Gaussian:
    """One time step: mean F m + push, covariance F P F' + Q, symmetric to the last bit."""
    cov = F @ posterior.cov @ F.T
    cov += Q
    cov += cov.T
    cov *= 0.5
    return Gaussian(F @ posterior.mean + push, cov)


@dataclass(frozen=True)
class Coupling:
    """Part of a transition: weights (rows, columns) by which some states move others."""

    rows: slice
    columns: slice
    weights: Array


def predict_coupled(
    posterior: Gaussian,
    keep: Array,
    couplings: tuple[Coupling, ...],
    Q: Array,
    push: Array | float = 0.0,
) -> Gaussian:
    """`predict` for F = diag(keep) + couplings, at a fraction of the dense product's work.

    keep (n,): share of each state that stays in it
    """
    P, m = posterior.cov, posterior.mean
    mean, FP = keep * m, keep[:, None] * P
    for c in couplings:
        mean[c.rows] += c.weights @ m[c.columns]
        FP[c.rows] += c.weights @ P[c.columns]
    cov = FP * keep
    for c in couplings:
        cov[:, c.rows] += FP[:, c.columns] @ c.weights.T
    cov += Q
    cov += cov.T
    cov *= 0.5
    return Gaussian(mean + push, cov)


def update(
    prior: Gaussian,
    z: Array,
    H: Array,
    R: Array,
    rows: tuple[int, ...] | None = None,
    expected: Array | None = None,
    considered: slice | None = None,
) -> tuple[Gaussian, Innovation]:
    """Condition the state on one set of readings.

    prior: mean (n,), cov (n, n);  z: readings (m,);  H (m, n)
    R: variances (m,) of independent readings;  rows: their names, for the record
    expected: what was expected of z, where that is not H @ mean
    considered: states whose uncertainty counts but which these readings may not move


    The covariance is (I - K H) P (I - K H)' + K R K', evaluated as products of
    low rank; it holds for any gain K.  Sources: Bucy & Joseph, Filtering for Stochastic
    Processes (1968); for considered states Schmidt, Application of State-Space Methods
    to Navigation Problems (1966), from memory.
    Raises ShapeError before computing anything if the shapes disagree.
    """
    n, m = prior.mean.size, z.size
    if prior.cov.shape != (n, n) or H.shape != (m, n) or R.shape != (m,):
        raise ShapeError(
            f"state {prior.mean.shape}, covariance {prior.cov.shape}, readings {z.shape}, "
            f"observation {H.shape} and variances {R.shape} do not fit each other"
        )
    names = tuple(range(m)) if rows is None else rows
    if m == 0:
        return prior, Innovation(names, z, np.zeros((0, 0)), 0.0, 0.0)
    HP = H @ prior.cov
    S = HP @ H.T
    S.ravel()[:: m + 1] += R
    factor, failed = dpotrf(S, lower=1)
    if failed:
        raise np.linalg.LinAlgError("the covariance of the readings is not positive definite")
    residual = z - (H @ prior.mean if expected is None else expected)
    weighed = dpotrs(factor, residual, lower=1)[0]
    K = np.ascontiguousarray(dpotrs(factor, HP, lower=1)[0].T)
    if considered is not None:
        K[considered] = 0.0
    cov = prior.cov - K @ HP
    cov -= (cov @ H.T - K * R) @ K.T
    cov += cov.T
    cov *= 0.5
    nis = float(residual @ weighed)
    log_det = 2.0 * float(np.log(factor.ravel()[:: m + 1]).sum())
    log_likelihood = -0.5 * (nis + log_det + m * LOG_2PI)
    posterior = Gaussian(prior.mean + K @ residual, cov)
    return posterior, Innovation(names, residual, S, nis, log_likelihood)
