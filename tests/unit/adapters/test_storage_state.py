"""The stored state of the estimator."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from platewatch.adapters.storage import Store
from platewatch.adapters.storage_state import pack_state, unpack_state
from platewatch.errors import StorageError
from platewatch.types import FieldShot, Outcome

U = 2.0**-24  # unit roundoff of float32


def a_shot(n: int, k: int, seed: int, at_us: int = 60) -> FieldShot:
    """A state in mixed units: kelvin and watts differ by orders of magnitude."""
    dice = np.random.default_rng(seed)
    scale = 10.0 ** dice.uniform(-3, 3, n)
    half = dice.normal(size=(n, n)) * scale[:, None]
    return FieldShot(at_us, "basis", dice.normal(size=n) * 100, half @ half.T, dice.normal(size=k))


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 40), st.integers(0, 9), st.integers(0, 1000))
def test_a_stored_state_comes_back_within_float32_of_its_covariance(n: int, k: int, seed: int):
    """Mean and drive to the bit; covariance to float32 rounding plus the n u safeguard."""
    shot = a_shot(n, k, seed)
    found = unpack_state(shot.at_us, shot.basis, pack_state(shot))
    np.testing.assert_array_equal(found.mean, shot.mean)
    np.testing.assert_array_equal(found.drive, shot.drive)
    np.testing.assert_allclose(found.cov, shot.cov, rtol=(n + 2) * U)
    np.testing.assert_array_equal(found.cov, found.cov.T)


@pytest.mark.parametrize("n", [2, 20, 82])
def test_rounding_never_makes_a_covariance_indefinite(n: int):
    """A restart from a nearly singular covariance must still allow a Cholesky factor.

    Perfectly correlated states are the worst case: the exact matrix is singular.
    """
    scale = 10.0 ** np.linspace(-4, 4, n)
    cov = np.outer(scale, scale) / 3.0
    shot = FieldShot(0, "b", np.zeros(n), cov, np.zeros(0))
    found = unpack_state(0, "b", pack_state(shot)).cov
    correlation = found / np.outer(scale, scale)
    assert np.linalg.eigvalsh(correlation).min() > -1e-12


def test_the_state_of_82_values_takes_less_than_15_kB():
    """One a minute: 8 header bytes and less, 82 float64, 3403 float32."""
    assert len(pack_state(a_shot(82, 6, 0))) < 15_000


@pytest.mark.parametrize("damage", [lambda b: b[:-1], lambda b: b"", lambda b: b"XXXX" + b[4:]])
def test_a_damaged_state_is_reported_and_not_used(damage):
    with pytest.raises(StorageError, match="platewatch verify"):
        unpack_state(0, "b", damage(pack_state(a_shot(3, 1, 0))))


def test_a_state_of_a_later_version_is_refused():
    state = bytearray(pack_state(a_shot(3, 1, 0)))
    state[4] = 9
    with pytest.raises(StorageError, match="version 9"):
        unpack_state(0, "b", bytes(state))


def test_a_state_with_a_value_that_is_no_number_is_never_stored():
    """A restart from it would blind the plate."""
    bad = FieldShot(0, "b", np.array([np.nan]), np.eye(1), np.zeros(0))
    with pytest.raises(StorageError, match="not finite"):
        pack_state(bad)


def test_look_back_finds_the_last_shot_at_or_before_a_time():
    """`export field --at` steps the filter forward from there."""
    with Store.open("sqlite://") as store:
        store.start_run("table", 0, "0.1", "ab")
        outcomes = [Outcome(at, shot=a_shot(4, 2, at, at)) for at in (60, 120, 180)]
        store.write("table", outcomes, [], {})
        at = [getattr(store.shot_before("table", t), "at_us", None) for t in (59, 60, 179, 999)]
        assert at == [None, 60, 120, 180]
        last = store.last_shot("table")
        assert last is not None
        assert (last.at_us, store.description_of_basis(last.basis)) == (180, "ab")
        assert store.last_shot("other") is None
