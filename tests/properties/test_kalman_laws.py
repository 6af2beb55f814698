"""Laws of the filter that hold for any plate and any reading."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from platewatch.errors import ShapeError
from platewatch.monitor.kalman import Coupling, predict, predict_coupled, update
from platewatch.types import Gaussian

sizes = st.tuples(st.integers(1, 8), st.integers(0, 6), st.integers(0, 2**32 - 1))


def case(n, m, seed, smallest_R=1e-3):
    """A random belief, observation and readings."""
    rng = np.random.default_rng(seed)
    root = rng.normal(0, 1, (n, n))
    prior = Gaussian(rng.normal(100, 20, n), root @ root.T + 1e-3 * np.eye(n))
    H, R = rng.normal(0, 1, (m, n)), smallest_R * 10 ** rng.uniform(0, 4, m)
    return prior, rng.normal(100, 20, m), H, R


@given(sizes)
def test_a_reading_never_increases_the_posterior_variance(size):
    """P - P' is positive semidefinite, in whatever direction one looks."""
    prior, z, H, R = case(*size)
    posterior, _ = update(prior, z, H, R)
    gained = np.linalg.eigvalsh(prior.cov - posterior.cov)
    assert gained.min() >= -1e-9 * np.abs(prior.cov).max()


@given(sizes)
def test_the_order_of_readings_does_not_matter(size):
    """All at once, or one after the other: the same belief."""
    prior, z, H, R = case(*size)
    together, _ = update(prior, z, H, R)
    one_by_one, total = prior, 0.0
    for i in range(z.size):
        one_by_one, innovation = update(one_by_one, z[i : i + 1], H[i : i + 1], R[i : i + 1])
        total += innovation.nis
    scale = np.abs(prior.cov).max()
    assert together.cov == pytest.approx(one_by_one.cov, rel=1e-6, abs=1e-8 * scale)
    assert together.mean == pytest.approx(one_by_one.mean, rel=1e-6, abs=1e-6)
    assert update(prior, z, H, R)[1].nis == pytest.approx(total, rel=1e-6)


@given(sizes)
def test_a_considered_state_is_not_moved_by_readings(size):
    """Its mean and variance stay; its uncertainty still makes the others' wider."""
    n, m, seed = size
    prior, z, H, R = case(n + 2, m, seed)
    kept = slice(n, n + 2)
    posterior, _ = update(prior, z, H, R, considered=kept)
    assert np.array_equal(posterior.mean[kept], prior.mean[kept])
    scale = np.abs(prior.cov).max()
    assert posterior.cov[kept, kept] == pytest.approx(prior.cov[kept, kept], abs=1e-9 * scale)
    best, _ = update(prior, z, H, R)
    lost = np.linalg.eigvalsh(posterior.cov - best.cov)
    assert lost.min() >= -1e-9 * scale


@given(sizes, st.floats(0.0, 1.0))
def test_a_step_keeps_a_covariance_symmetric_and_positive(size, decay):
    """Symmetric to the last bit, so that a replay gives the same bits."""
    n, m, seed = size
    prior, z, H, R = case(n, m, seed)
    moved = predict(prior, decay * np.eye(n), 1e-6 * np.eye(n), 1.0)
    posterior, _ = update(moved, z, H, R)
    for cov in (moved.cov, posterior.cov):
        assert np.array_equal(cov, cov.T)
        assert np.linalg.eigvalsh(cov).min() > -1e-12 * np.abs(cov).max()


@given(st.integers(0, 2**32 - 1))
def test_a_step_by_its_couplings_is_the_dense_step(seed):
    """F = diag(keep) + couplings, overlapping or not: the same belief to rounding."""
    rng = np.random.default_rng(seed)
    prior, _, _, _ = case(9, 0, seed)
    keep, Q, push = rng.random(9), np.diag(rng.random(9)), rng.random(9)
    couplings = (
        Coupling(slice(0, 4), slice(4, 6), rng.normal(0, 1, (4, 2))),
        Coupling(slice(6, 8), slice(0, 6), rng.normal(0, 1, (2, 6))),
        Coupling(slice(0, 4), slice(8, 9), rng.normal(0, 1, (4, 1))),
    )
    F = np.diag(keep)
    for c in couplings:
        F[c.rows, c.columns] += c.weights
    dense, quick = predict(prior, F, Q, push), predict_coupled(prior, keep, couplings, Q, push)
    assert quick.mean == pytest.approx(dense.mean, rel=1e-12, abs=1e-9)
    assert quick.cov == pytest.approx(dense.cov, rel=1e-12, abs=1e-11 * np.abs(dense.cov).max())
    assert np.array_equal(quick.cov, quick.cov.T)


def test_readings_that_contradict_their_own_covariance_are_refused():
    """A covariance that is none is our own mistake: no belief is made from it."""
    with pytest.raises(np.linalg.LinAlgError, match="not positive definite"):
        update(Gaussian(np.zeros(1), -np.eye(1)), np.zeros(1), np.eye(1), np.array([0.5]))


def many_steps(steps, R_least):
    """Smallest eigenvalue and largest asymmetry seen; every third reading is missing."""
    F = np.array([[0.999, 0.0005, 0.0], [0.2, 0.8, 0.0], [0.0, 0.0, 1.0]])
    Q = np.diag([1e-6, 1e-9, 1e-12])
    H = np.array([[0.0, 1.0, 1.0], [1.0, 0.0, 0.0]])
    R = np.array([R_least, R_least])
    belief = Gaussian(np.full(3, 20.0), np.diag([400.0, 400.0, 1.0]))
    wave = 20 + np.sin(np.arange(steps) * 1e-3)
    least, asymmetry = np.inf, 0.0
    rows = [np.array([0, 1]), np.array([0]), np.array([1]), np.array([], dtype=int)]
    for t in range(steps):
        there = rows[(t % 3) if t % 100 else 3]
        belief = predict(belief, F, Q)
        belief, _ = update(belief, np.full(there.size, wave[t]), H[there], R[there])
        if t % 500 == 0:
            least = min(least, float(np.linalg.eigvalsh(belief.cov).min()))
            asymmetry = max(asymmetry, float(np.abs(belief.cov - belief.cov.T).max()))
    assert np.isfinite(belief.mean).all()
    return least, asymmetry


@pytest.mark.timeout(120)
def test_the_covariance_stays_positive_over_a_hundred_thousand_steps():
    """Readings a hundred million times surer than the first belief, some of them missing."""
    least, asymmetry = many_steps(100_000, 1e-12)
    assert least > 0
    assert asymmetry == 0


@settings(max_examples=20)
@given(st.integers(1, 4), st.integers(1, 4))
def test_arrays_that_do_not_fit_are_refused_before_anything_is_computed(n, m):
    """A shape mistake names every shape."""
    prior = Gaussian(np.zeros(n), np.eye(n))
    with pytest.raises(ShapeError, match="do not fit"):
        update(prior, np.zeros(m), np.zeros((m, n + 1)), np.ones(m))
    with pytest.raises(ShapeError, match="do not fit"):
        update(prior, np.zeros(m), np.zeros((m, n)), np.ones((m, m)))
