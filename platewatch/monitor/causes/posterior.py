"""Amplitudes of a cause's combinations of patterns, each of the sign its cause must have.

Many variants (places, sizes) of one cause are worked out at once as small matrices.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cholesky, solve_triangular
from scipy.optimize import nnls

from platewatch.types import Array

SINGLE = 1e-5
MOST_TRIED = 12  # variants of two causes together that are fitted with their signs
MOST_SUBSETS = 4  # combinations of which all subsets are tried


@dataclass(frozen=True)
class Posterior:
    """z (c,): mean amplitude in prior sd;  root (c, k) of its covariance."""

    z: Array
    root: Array
    evidence: float


def best_of(G: Array, b: Array, T: Array, signs: Array) -> tuple[list[Posterior], int]:
    """The variants that may matter, each with its amplitudes, and how many there were.

    T (v, c, k)
    """
    M = T.transpose(0, 2, 1) @ (G @ T)
    c = b @ T
    index = np.arange(signs.size)
    # Signatures are kept in single precision: their rounding must not show as negative.
    M[:, index, index] += 1 + SINGLE * M[:, index, index].max(axis=1, initial=0.0)[:, None]
    if signs.size <= MOST_SUBSETS and signs.all():
        return _one_sided(M, c, T, signs), len(T)
    lower = np.linalg.cholesky(M)
    half = np.linalg.solve(lower, c[:, :, None])[:, :, 0]
    bound = 0.5 * np.square(half).sum(axis=1) - np.log(np.diagonal(lower, axis1=1, axis2=2)).sum(1)
    leading = np.argsort(-bound, kind="stable")[:MOST_TRIED]
    return [_posterior(M[v], c[v], T[v], signs) for v in leading], len(T)


def _one_sided(M: Array, c: Array, T: Array, signs: Array) -> list[Posterior]:
    """All variants at once, every amplitude of its cause's sign.

    Of all subsets of the combinations, the one whose own solution is positive and
    explains most is the non-negative solution.
    """
    count, k = c.shape
    M, c = signs[:, None] * M * signs, c * signs
    quad = np.zeros(count)
    evidence, z, root = np.zeros(count), np.zeros((count, k)), np.zeros((count, k, k))
    for number in range(1, 2**k):
        s = [i for i in range(k) if number >> i & 1]
        lower = np.linalg.cholesky(M[:, s][:, :, s])
        half = np.linalg.solve(lower, c[:, s, None])
        x = np.linalg.solve(lower.transpose(0, 2, 1), half)[:, :, 0]
        explained = np.square(half).sum(axis=(1, 2))
        better = (x > 0).all(axis=1) & (explained > quad)
        if not better.any():
            continue
        quad[better] = explained[better]
        log_det = np.log(np.diagonal(lower, axis1=1, axis2=2)).sum(axis=1)
        evidence[better] = (0.5 * explained - log_det)[better]
        z[better] = 0.0
        z[np.ix_(np.flatnonzero(better), np.array(s))] = x[better]
        inverse = np.linalg.inv(lower[better]).transpose(0, 2, 1)
        root[better] = 0.0
        root[np.ix_(np.flatnonzero(better), np.array(s), np.arange(len(s)))] = inverse
    return [
        Posterior(T[v] @ (signs * z[v]), T[v] @ (signs[:, None] * root[v]), float(evidence[v]))
        for v in range(count)
    ]


def _posterior(M: Array, c: Array, T: Array, signs: Array) -> Posterior:
    """Amplitudes of one variant; those with a sign that would come out wrong stay at none."""
    active = _same_sign(M, c, signs) if signs.any() else np.arange(c.size)
    z, root = np.zeros(c.size), np.zeros((c.size, c.size))
    if active.size == 0:
        return Posterior(T @ z, T @ root, 0.0)
    lower = cholesky(M[np.ix_(active, active)], lower=True, check_finite=False)
    half = solve_triangular(lower, c[active], lower=True, check_finite=False)
    z[active] = solve_triangular(lower.T, half, lower=False, check_finite=False)
    inverse = solve_triangular(lower, np.eye(active.size), lower=True, check_finite=False)
    root[np.ix_(active, np.arange(active.size))] = inverse.T
    evidence = 0.5 * float(half @ half) - float(np.log(np.diag(lower)).sum())
    return Posterior(T @ z, T @ root, evidence)


def _same_sign(M: Array, b: Array, signs: Array) -> NDArray[np.int64]:
    """Combinations that stay when every amplitude must have its cause's sign.

    A load takes heat all the time: without the sign, its shapes would cancel.  Source:
    Lawson & Hanson, Solving Least Squares Problems (1974), ch. 23 (non-negative least
    squares).
    """
    flip = np.where(signs == 0, 1.0, signs)
    lower = cholesky(flip[:, None] * M * flip, lower=True, check_finite=False)
    target = solve_triangular(lower, flip * b, lower=True, check_finite=False)
    free = signs == 0
    design = np.column_stack((lower.T, -lower.T[:, free])) if free.any() else lower.T
    solution, _ = nnls(design, target)
    chosen = solution[: b.size] > 0
    chosen[free] = True
    return np.flatnonzero(chosen)
