"""The filter by second routes, and whether its consistency is seen or missed."""

import numpy as np
import pytest

from platewatch.errors import ShapeError
from platewatch.monitor import consistency
from platewatch.monitor.consistency import Fit
from platewatch.monitor.kalman import predict, update
from platewatch.types import Gaussian

# Bar-Shalom, Li & Kirubarajan (2001), section 5.4; figures computed from chi-square.
BOUNDS = [
    (50, 2, 1.4844, 2.5912),
    (50, 1, 0.6471, 1.4284),
    (100, 3, 2.5391, 3.4987),
    (200, 2, 1.7324, 2.2865),
]
GATES = [
    (0.99, 1, 6.6349),
    (0.99, 2, 9.2103),
    (0.99, 4, 13.2767),
    (0.99, 9, 21.666),
    (0.999, 1, 10.8276),
    (0.999, 2, 13.8155),
    (0.999, 4, 18.4668),
    (0.999, 9, 27.8772),
]


@pytest.mark.parametrize(("runs", "dof", "low", "high"), BOUNDS)
def test_an_average_of_runs_is_held_against_the_published_bounds(runs, dof, low, high):
    """95 % of N-run averages lie within chi-square bounds divided by N."""
    assert consistency.average_bounds(runs, dof) == pytest.approx((low, high), abs=5e-5)


@pytest.mark.parametrize(("confidence", "dof", "value"), GATES)
def test_a_single_step_is_held_against_the_published_gate(confidence, dof, value):
    """Percentiles of chi-square."""
    assert consistency.gate(dof, confidence) == pytest.approx(value, abs=5e-4)


# Three nodes in a row (C = 50, 80, 60 J/K, 0.5 W/K between, 0.1 W/K lost each, 5 s), of
# which the outer two are read.
F = np.array(
    [
        [0.94249832106, 0.046905227221, 0.00073624111879],
        [0.029315767013, 0.93490344056, 0.029463015237],
        [0.00061353426565, 0.039284020315, 0.95184500859],
    ]
)
H = np.array([[1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
Q = np.diag([0.04, 0.01, 0.04])
R = np.array([0.25, 0.25])
PRIOR = Gaussian(np.zeros(3), 4 * np.eye(3))
RUNS, STEPS = 50, 200


def simulated(told_Q):
    """NEES, NIS and whitened innovations of 50 runs of a filter that was told `told_Q`."""
    nees, nis, white = np.empty((RUNS, STEPS)), np.empty((RUNS, STEPS)), []
    for run in range(RUNS):
        rng = np.random.default_rng(1000 + run)
        x, belief = 2 * rng.standard_normal(3), PRIOR
        for t in range(STEPS):
            if t:
                x = F @ x + np.sqrt(np.diag(Q)) * rng.standard_normal(3)
                belief = predict(belief, F, told_Q)
            z = H @ x + np.sqrt(R) * rng.standard_normal(2)
            belief, innovation = update(belief, z, H, R)
            nees[run, t] = consistency.nees(x, belief)
            nis[run, t] = innovation.nis
            white.append(consistency.whitened(innovation.residual, innovation.S))
    return nees, nis, np.array(white).reshape(RUNS, STEPS, 2)


def test_a_filter_that_is_told_the_truth_is_consistent():
    """Mean NEES 3 and NIS 2 within their bounds over all runs; innovations white."""
    nees, nis, white = simulated(Q)
    errors, innovations = consistency.averages(nees, 3), consistency.averages(nis, 2)
    assert errors.fit is Fit.FITS
    assert innovations.fit is Fit.FITS
    low, high = consistency.average_bounds(RUNS * STEPS, 2, 0.999)
    assert low <= innovations.mean <= high
    found = [consistency.whiteness(run) for run in white]
    # Binomial(50, 0.05): more than eight fail with a chance below one in a thousand.
    assert sum(not w.white for w in found) <= 8


@pytest.mark.parametrize(
    ("factor", "nees_mean", "nis_mean", "fit"),
    [(0.1, 21.29, 3.013, Fit.TOO_CONFIDENT), (10.0, 1.711, 1.016, Fit.TOO_TIMID)],
)
def test_a_filter_that_is_told_a_wrong_process_noise_is_found_out(factor, nees_mean, nis_mean, fit):
    """Q/10 and Q*10: both flagged by NEES and by NIS.

    The means were computed by an independent program with noise of its own.  A mean of
    50 runs of such errors scatters by about 3 %; 10 % allows for that.
    """
    nees, nis, white = simulated(Q * factor)
    errors, innovations = consistency.averages(nees, 3), consistency.averages(nis, 2)
    assert errors.fit is fit
    assert innovations.fit is fit
    assert errors.mean == pytest.approx(nees_mean, rel=0.1)
    assert innovations.mean == pytest.approx(nis_mean, rel=0.1)
    found = [consistency.whiteness(run) for run in white]
    assert sum(not w.white for w in found) > RUNS / 2
    first = np.mean([w.correlation[0] for w in found])
    assert (first > 0) == (fit is Fit.TOO_CONFIDENT)


def test_consistency_asks_for_enough_values():
    """No verdict on nothing."""
    with pytest.raises(ShapeError, match="runs by steps"):
        consistency.averages(np.empty((0, 3)), 2)
    with pytest.raises(ShapeError, match="too few"):
        consistency.whiteness(np.zeros(5), lags=10)


def sequence(steps=12, seed=3):
    """A short series with gaps: which readings are there, and their values."""
    rng = np.random.default_rng(seed)
    rows = [np.flatnonzero(rng.random(2) < 0.7) for _ in range(steps)]
    return [(r, rng.normal(20, 5, r.size)) for r in rows]


def test_a_sequence_of_readings_agrees_with_the_information_form():
    """Y = P^-1 and y = P^-1 m add H' R^-1 H and H' R^-1 z (Bar-Shalom, section 7.2, from
    memory)."""
    belief = PRIOR
    Y, y = np.linalg.inv(PRIOR.cov), np.zeros(3)
    for rows, z in sequence():
        belief = predict(belief, F, Q, 0.5)
        cov = F @ np.linalg.inv(Y) @ F.T + Q
        mean = F @ np.linalg.solve(Y, y) + 0.5
        belief, _ = update(belief, z, H[rows], R[rows])
        weight = H[rows].T / R[rows]
        Y = np.linalg.inv(cov) + weight @ H[rows]
        y = np.linalg.solve(cov, mean) + weight @ z
        assert belief.mean == pytest.approx(np.linalg.solve(Y, y), rel=1e-9)
        assert belief.cov == pytest.approx(np.linalg.inv(Y), rel=1e-9, abs=1e-12)


def test_a_sequence_of_readings_agrees_with_one_dense_least_squares():
    """All states of all steps at once, each equation divided by its standard deviation."""
    series = sequence()
    n, steps = 3, len(series)
    lines, right = [], []

    def equation(blocks, value, sd):
        line = np.zeros((len(value), n * (steps + 1)))
        for step, block in blocks:
            line[:, n * step : n * step + n] = block
        lines.append(line / sd[:, None])
        right.append(value / sd)

    equation([(0, np.eye(n))], PRIOR.mean, np.sqrt(np.diag(PRIOR.cov)))
    belief = PRIOR
    for k, (rows, z) in enumerate(series):
        belief, _ = update(predict(belief, F, Q, 0.5), z, H[rows], R[rows])
        equation([(k, -F), (k + 1, np.eye(n))], np.full(n, 0.5), np.sqrt(np.diag(Q)))
        if rows.size:
            equation([(k + 1, H[rows])], z, np.sqrt(R[rows]))
    A, b = np.vstack(lines), np.concatenate(right)
    solution = np.linalg.lstsq(A, b, rcond=None)[0]
    cov = np.linalg.inv(A.T @ A)
    assert belief.mean == pytest.approx(solution[-n:], rel=1e-9)
    assert belief.cov == pytest.approx(cov[-n:, -n:], rel=1e-9, abs=1e-12)
