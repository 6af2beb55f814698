"""The Kalman filter itself: predict and update.  Knows no plate."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_factor, cho_solve

from platewatch.errors import ShapeError
from platewatch.types import Array, Gaussian


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
    S[np.diag_indices(m)] += R
    factor = cho_factor(S, lower=True, check_finite=False)
    residual = z - (H @ prior.mean if expected is None else expected)
    whitened = cho_solve(factor, residual, check_finite=False)
    K = cho_solve(factor, HP, check_finite=False).T
    if considered is not None:
        K[considered] = 0.0
    W = prior.cov - K @ HP
    cov = W - (W @ H.T) @ K.T
    cov += (K * R) @ K.T
    cov += cov.T
    cov *= 0.5
    nis = float(residual @ whitened)
    log_det = 2.0 * float(np.log(np.diag(factor[0])).sum())
    log_likelihood = -0.5 * (nis + log_det + m * float(np.log(2 * np.pi)))
    posterior = Gaussian(prior.mean + K @ residual, cov)
    return posterior, Innovation(names, residual, S, nis, log_likelihood)
