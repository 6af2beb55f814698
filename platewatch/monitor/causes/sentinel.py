"""An observer with a constant gain beside the quiet filter.

Because its gain never changes, what any unmodelled heat or sensor fault does to
its innovations is a fixed signature by age, worked out once.  It sees the plate
with the parameters that the quiet filter has learned.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cholesky, lu_factor, lu_solve, solve_triangular

from platewatch.monitor.estimator import Quiet
from platewatch.types import Array

DOUBLINGS = 12  # 2^12 ticks of the Riccati recursion


@dataclass(frozen=True)
class Sentinel:
    """The observer of one set of sensors at one tick length.

    n counts every state but theta.
    sensors: which are listened to;  F (n, n), H (m, n), K (n, m)
    whiten (m, m): turns innovations into unit normals;  cov (n, n): after an update
    """

    sensors: tuple[int, ...]
    F: Array
    H: Array
    K: Array
    whiten: Array
    cov: Array


def steady_prior(F: Array, H: Array, Q: Array, R: Array) -> Array:
    """Covariance before an update once the filter has settled (n, n).

    Structure-preserving doubling: k doublings are 2^k steps of the Riccati recursion.
    Source: Chu, Fan, Lin & Wang, Int. J. Control 77 (2004) 767, from memory.
    """
    n = len(F)
    A, G, P = F.T.copy(), H.T @ (H / R[:, None]), Q.copy()
    identity = np.eye(n)
    for _ in range(DOUBLINGS):
        factor = lu_factor(identity + G @ P, check_finite=False)
        M = lu_solve(factor, A, check_finite=False)
        W = lu_solve(factor, G, check_finite=False)
        G = G + A @ W @ A.T
        P = P + A.T @ P @ M
        A = A @ M
        G, P = (G + G.T) / 2, (P + P.T) / 2
    return P


def build_sentinel(quiet: Quiet, tick_us: int, sensors: tuple[int, ...]) -> Sentinel:
    """The observer that listens to these sensors only."""
    k = quiet.blocks
    n = k.theta.start
    step = quiet.steps.of(tick_us)
    F, Q = np.ascontiguousarray(step.F[:n, :n]), step.Q[:n, :n]
    rows = list(sensors)
    H, R = quiet.H[rows, :n], quiet.noise_var[rows]
    prior = steady_prior(F, H, Q, R)
    S = H @ prior @ H.T + np.diag(R)
    lower = cholesky(S, lower=True)
    whiten = solve_triangular(lower, np.eye(len(rows)), lower=True)
    K = prior @ H.T @ whiten.T @ whiten
    cov = prior - K @ S @ K.T
    return Sentinel(sensors, F, H, K, whiten, (cov + cov.T) / 2)
