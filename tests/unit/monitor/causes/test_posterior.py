"""Amplitudes with a sign, all variants at once, against one by one."""

from __future__ import annotations

import numpy as np
import pytest

from platewatch.monitor.causes.posterior import MOST_SUBSETS, Posterior, best_of
from platewatch.types import Array


def _problem(seed: int, columns: int = 12, variants: int = 9) -> tuple[Array, Array, Array]:
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((40, columns)) + 1.5 * rng.standard_normal((40, 1))
    T = np.abs(rng.standard_normal((variants, columns, MOST_SUBSETS)))
    A = A / 10
    return A.T @ A, A.T @ (9 * rng.standard_normal(40)), T


def _one_by_one(G: Array, b: Array, T: Array, signs: Array) -> list[Posterior]:
    """A free combination of no effect sends each variant the long way, by Lawson & Hanson."""
    longer = np.concatenate((T, np.zeros((*T.shape[:2], 1))), axis=2)
    return [best_of(G, b, t[None], np.append(signs, 0.0))[0][0] for t in longer]


@pytest.mark.parametrize("sign", [-1.0, 1.0])
@pytest.mark.parametrize("seed", range(5))
def test_the_best_subset_is_the_non_negative_solution(seed: int, sign: float) -> None:
    """Evidence, amplitudes and covariance of every variant agree with non-negative least
    squares (Lawson & Hanson 1974, ch. 23)."""
    G, b, T = _problem(seed)
    signs = np.full(MOST_SUBSETS, sign)
    at_once, count = best_of(G, b, T, signs)
    assert count == len(T)
    for ours, theirs in zip(at_once, _one_by_one(G, b, T, signs), strict=True):
        assert ours.evidence == pytest.approx(theirs.evidence, abs=2e-3)
        assert ours.z == pytest.approx(theirs.z, rel=1e-3, abs=1e-4)
        cov = ours.root @ ours.root.T
        assert cov == pytest.approx(theirs.root @ theirs.root.T, rel=1e-2, abs=1e-3)


def test_no_amplitude_has_the_wrong_sign() -> None:
    """A load takes heat with every one of its shapes."""
    for seed in range(20):
        G, b, T = _problem(seed)
        for found in best_of(G, b, T, np.full(MOST_SUBSETS, -1.0))[0]:
            assert (found.z <= 1e-12).all()
