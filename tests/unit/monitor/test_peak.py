"""The hottest place and its distribution."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import ndtr, ndtri
from watched_plate import TICK_US, monitor, observed, quiet

from platewatch.errors import PlateError
from platewatch.monitor.estimator import advance, first_state
from platewatch.monitor.peak import (
    DRAWS,
    WHOLE_PLATE,
    Hottest,
    candidates,
    hottest_now,
    most_common,
    places,
    probability_over,
    square_root,
    standard_draws,
)
from platewatch.types import Gaussian


def warm(readings=(118.0, 121.0, 119.0), ticks=100):
    """A belief after a while of these readings."""
    q = quiet()
    state = first_state(q, 0, observed(q, readings, (60.0, 60.0)))
    for _ in range(ticks):
        state, _ = advance(q, state, TICK_US, observed(q, readings, (60.0, 60.0)))
    return q, state.belief


def test_the_draws_are_always_the_same():
    """A replay on another day, by the same version of numpy, draws the same fields."""
    Z = standard_draws(60)
    assert np.array_equal(Z, standard_draws(60))
    rng = np.random.Generator(np.random.PCG64(18_221_807))
    assert np.array_equal(Z[:3, 0], rng.standard_normal((128, 60))[0, :3])


def test_every_draw_has_its_mirror_image():
    """So the mean of the draws is the belief's mean, to rounding."""
    Z = standard_draws(60)
    assert Z.shape == (60, DRAWS)
    assert np.array_equal(Z[:, : DRAWS // 2], -Z[:, DRAWS // 2 :])


def test_the_present_maximum_is_distributed_as_brute_force_finds_it():
    """20,000 independent fields on every cell, against 256 fixed draws on few cells.

    The mean of 256 draws has a standard error of sd / 16, their sd one of sd / 22.6, and
    the 97.5 % quantile one of 2.6 sd / 16; four of each are allowed."""
    q, belief = warm()
    found = hottest_now(q, monitor().where, belief, standard_draws(q.blocks.size), WHOLE_PLATE)
    a, rng = q.blocks.a, np.random.default_rng(99)
    root = np.linalg.cholesky(belief.cov[a, a] + 1e-10 * np.eye(q.blocks.modes))
    V, mean = q.reduced.V, q.reduced.V @ belief.mean[a]
    tops = np.concatenate(
        [
            (mean[:, None] + V @ (root @ rng.standard_normal((q.blocks.modes, 2000)))).max(axis=0)
            for _ in range(10)
        ]
    )
    sd = tops.std()
    assert found.degC == pytest.approx(tops.mean(), abs=4 * sd / 16)
    assert found.sd_K == pytest.approx(sd, abs=4 * sd / 22.6)
    assert found.quantile(0.975) == pytest.approx(np.quantile(tops, 0.975), abs=4 * 2.6 * sd / 16)
    assert found.degC > mean.max()


def test_few_candidate_cells_give_the_maximum_of_all_cells():
    """The same draws on every cell: the same maximum to a tenth of a kelvin in the mean, and
    in every draw to half of the maximum's own standard deviation."""
    q, belief = warm()
    Z, a = standard_draws(q.blocks.size), q.blocks.a
    found = hottest_now(q, monitor().where, belief, Z, WHOLE_PLATE)
    V = q.reduced.V
    every = (V @ belief.mean[a])[:, None] + V @ (square_root(belief.cov[a, a]) @ Z[a])
    missed = every.max(axis=0) - found.samples
    assert missed.min() >= -1e-4  # single precision
    assert missed.mean() < 0.1
    assert missed.max() < 0.5 * found.sd_K


def test_the_hottest_place_is_where_the_hotter_heater_is():
    """B reads 3 K more than A: the maximum lies over the right zone."""
    q, belief = warm((118.0, 124.0, 120.0), 300)
    found = hottest_now(q, monitor().where, belief, standard_draws(q.blocks.size), WHOLE_PLATE)
    assert q.cell_zone[found.cell] == "R"


def test_a_zone_has_a_hottest_place_of_its_own():
    """A limit for the left zone looks at the left zone only."""
    q, belief = warm((118.0, 124.0, 120.0), 300)
    Z = standard_draws(q.blocks.size)
    whole = hottest_now(q, monitor().where, belief, Z, WHOLE_PLATE)
    left = hottest_now(q, monitor().where, belief, Z, "L")
    assert q.cell_zone[left.cell] == "L"
    assert (left.samples <= whole.samples + 1e-4).all()


def test_a_colder_block_is_left_out_and_a_near_one_kept():
    """Candidates are the hottest cell of each block within the margin."""
    region = monitor().where.regions[WHOLE_PLATE]
    field = np.linspace(100.0, 101.0, region.cells.size, dtype=np.float32)[None]
    field[0, 7] = 110.0
    assert candidates(region, field, np.array([5.0])).tolist() == [7]
    assert candidates(region, field, np.array([15.0])).size == region.starts.size


def test_candidates_of_several_looks_are_those_of_each():
    """A look at a cold plate does not lose the hot place of another."""
    region = monitor().where.regions[WHOLE_PLATE]
    fields = np.full((2, region.cells.size), 100.0, dtype=np.float32)
    fields[0, 7], fields[1, 450] = 110.0, 105.0
    assert candidates(region, fields, np.array([5.0, 4.0])).tolist() == [7, 450]


def test_cells_equally_hot_are_candidates_together():
    """Rounding does not choose between mirrored cells: 1e-5 K apart, both count."""
    region = monitor().where.regions[WHOLE_PLATE]
    field = np.full((1, region.cells.size), 100.0, dtype=np.float32)
    field[0, 2], field[0, 3] = 110.0, 110.0 - 2e-5
    assert candidates(region, field, np.array([5.0])).tolist() == [2, 3]


@pytest.mark.parametrize("zone", [WHOLE_PLATE, "L"])
def test_every_cell_lies_in_exactly_one_block(zone):
    """No cell is forgotten, none counted twice, and rows belong to their cells."""
    q, region = quiet(), monitor().where.regions[zone]
    assert region.sizes.sum() == region.cells.size
    assert np.array_equal(region.starts, np.cumsum(region.sizes) - region.sizes)
    assert region.sizes.max() <= 16
    wanted = [c for c, name in enumerate(q.cell_zone) if zone in (WHOLE_PLATE, name)]
    assert sorted(region.cells.tolist()) == wanted
    assert np.array_equal(region.rows, q.reduced.V[region.cells])


def test_a_zone_too_small_for_a_cell_is_a_clear_mistake():
    """Its hottest place could not be told."""
    with pytest.raises(PlateError, match=r"zone 'X' is nearest to no cell.*cell_mm"):
        places(quiet(), ("X",))


limits = st.floats(100.0, 170.0)


@given(limits, limits, st.integers(0, 1000))
def test_a_higher_limit_is_never_more_likely_to_be_passed(one, other, seed):
    """Monotone in the limit, and between 0 and 1."""
    samples = np.random.default_rng(seed).normal(135, 3, 64)
    low, high = sorted((one, other))
    p_low, p_high = probability_over(samples, low), probability_over(samples, high)
    assert 0 <= p_high <= p_low <= 1


@given(limits, st.integers(0, 1000))
def test_the_probability_moves_smoothly_with_the_limit(limit, seed):
    """A hundredth of a kelvin moves it by less than one draw of 64 would jump: the slope of a
    smeared share is at most 0.4 / width."""
    samples = np.random.default_rng(seed).normal(135, 3, 64)
    width = 1.06 * samples.std() * 64**-0.2
    step = probability_over(samples, limit) - probability_over(samples, limit + 0.01)
    assert 0 <= step <= 0.01 * 0.4 / width + 1e-12


def test_the_probability_is_that_of_the_distribution():
    """Normal samples 1 sd over the limit: 84 %, less what the smearing adds to the spread
    (sqrt(1 + (1.06 n^-1/5)^2) sd)."""
    samples = 135 + 3 * ndtri((np.arange(4096) + 0.5) / 4096)
    widened = 3 * np.sqrt(1 + (1.06 * 4096**-0.2) ** 2)
    assert probability_over(samples, 132.0) == pytest.approx(ndtr(3 / widened), abs=1e-3)


def test_a_maximum_known_exactly_is_over_or_it_is_not():
    """No spread: 0 or 1."""
    samples = np.full(64, 135.0)
    assert probability_over(samples, 134.9) == 1.0
    assert probability_over(samples, 135.0) == 0.0


def test_quantiles_and_spread_are_those_of_the_draws():
    """Mean, standard deviation and quantiles as numpy defines them."""
    samples = np.random.default_rng(4).normal(130, 2, 256)
    hottest = Hottest(samples, 0)
    for p in (0.0, 0.025, 0.3, 0.5, 0.975, 1.0):
        assert hottest.quantile(p) == pytest.approx(np.quantile(samples, p), abs=1e-9)
    assert hottest.degC == pytest.approx(samples.mean())
    assert hottest.sd_K == pytest.approx(samples.std())


def test_the_place_most_often_largest_is_named_the_lower_number_where_two_tie():
    """The same draws always name the same cell."""
    assert most_common(np.array([5, 3, 5, 3, 9])) == 3
    assert most_common(np.array([9, 9, 3])) == 9


def test_a_covariance_singular_to_rounding_still_has_a_root():
    """Two modes known to be equal: rank one, and the root reproduces it."""
    cov = np.array([[1.0, 1.0], [1.0, 1.0]])
    root = square_root(cov)
    assert root @ root.T == pytest.approx(cov, abs=1e-6)


def test_a_covariance_that_is_none_is_refused():
    """A negative variance is our own mistake and is not hidden."""
    with pytest.raises(np.linalg.LinAlgError, match="not positive definite"):
        square_root(np.diag([1.0, -1.0]))


def test_a_field_known_exactly_has_its_maximum_in_the_hottest_cell():
    """No spread left: the maximum is that of the mean."""
    q, belief = warm()
    sure = Gaussian(belief.mean, 1e-12 * np.eye(q.blocks.size))
    found = hottest_now(q, monitor().where, sure, standard_draws(q.blocks.size), WHOLE_PLATE)
    field = q.reduced.V @ belief.mean[q.blocks.a]
    assert found.degC == pytest.approx(field.max(), abs=1e-3)
    assert found.cell == field.argmax()
