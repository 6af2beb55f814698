"""The filter against published figures and independent programs."""

import os
from functools import cache
from pathlib import Path

import filterpy.kalman
import numpy as np
import pytest
from scipy.linalg import block_diag, solve_discrete_are
from scipy.optimize import minimize
from statsmodels.datasets import nile
from statsmodels.tsa.statespace.mlemodel import MLEModel

from platewatch.monitor.kalman import predict, update
from platewatch.types import Gaussian

# Durbin & Koopman, Time Series Analysis by State Space Methods (2001), chapter 2; the
# figures beyond their printed digits were computed with statsmodels 0.15.
NILE_EPS, NILE_ETA = 15099.0, 1469.1
I1 = np.eye(1)


def local_level(flow, prior, eta=NILE_ETA, eps=NILE_EPS):
    """Filter a local level; posteriors, innovations and log-likelihood, first step included."""
    beliefs, found, total, belief = [], [], 0.0, prior
    for t, z in enumerate(flow):
        if t:
            belief = predict(belief, I1, np.array([[eta]]))
        belief, innovation = update(belief, np.array([z]), I1, np.array([eps]))
        total += innovation.log_likelihood
        beliefs.append(belief)
        found.append(innovation)
    return beliefs, found, total


def after_first(flow, eta=NILE_ETA, eps=NILE_EPS):
    """The exact diffuse start: the first flow is the level, known to its own variance."""
    level = predict(Gaussian(flow[:1], np.array([[eps]])), I1, np.array([[eta]]))
    return local_level(flow[1:], level, eta, eps)


@pytest.fixture(scope="module")
def flow():
    values = nile.load_pandas().data["volume"].to_numpy(dtype=np.float64)
    assert values.sum() == 91935  # Durbin & Koopman's own series
    return values


def test_the_level_of_the_nile_is_that_of_the_textbook(flow):
    """Durbin & Koopman, chapter 2: filtered levels, variances, innovations."""
    beliefs, found, total = after_first(flow)
    assert total == pytest.approx(-632.5456251157, rel=1e-8)
    level = [beliefs[i].mean[0] for i in (0, 1, 2, 98)]
    known = [1140.9278399348, 1072.7985295274, 1117.3089545639, 798.3702926083]
    assert level == pytest.approx(known, rel=1e-8)
    variance = [beliefs[i].cov[0, 0] for i in (0, 1, 2, 98)]
    known = [7899.7363793969, 5781.4699387, 4898.3651947085, 4032.1579418]
    assert variance == pytest.approx(known, rel=1e-8)
    residual = [found[i].residual[0] for i in range(3)]
    assert residual == pytest.approx([40, -177.9278399348, 137.2014704726], rel=1e-8)
    expected_variance = [found[i].S[0, 0] for i in range(3)]
    assert expected_variance == pytest.approx([31667.1, 24467.8363793969, 22349.5699387], rel=1e-8)


def test_the_nile_from_a_known_start_has_its_likelihood(flow):
    """a1 = 1000, P1 = 1e5: computed with statsmodels 0.15."""
    _, _, total = local_level(flow, Gaussian(np.array([1000.0]), np.array([[1e5]])))
    assert total == pytest.approx(-639.3007238142, rel=1e-8)


def test_the_nile_settles_at_the_steady_state_of_the_riccati_equation(flow):
    """Durbin & Koopman quote P -> 4032.2 and K = 0.27; the DARE gives 5501.2579418085."""
    beliefs, _, _ = after_first(flow)
    ahead = beliefs[-1].cov[0, 0] + NILE_ETA
    dare = solve_discrete_are(I1, I1, I1 * NILE_ETA, I1 * NILE_EPS)[0, 0]
    assert ahead == pytest.approx(5501.2579418085, rel=1e-8)
    assert ahead == pytest.approx(dare, rel=1e-8)
    assert ahead / (ahead + NILE_EPS) == pytest.approx(0.2670480125709, rel=1e-8)


@pytest.mark.parametrize(
    ("year", "mean", "variance"),
    [
        (1, 1111.6683191268, 4032.1579418),
        (2, 1110.8576646218, 3242.9300732),
        (50, None, 2326.7568698),
    ],
)
def test_what_the_whole_record_says_of_one_year(flow, year, mean, variance):
    """The smoothed level: a copy of that year's level rides along in the state."""
    beliefs, _, _ = after_first(flow[:year]) if year > 1 else ([], [], 0.0)
    belief = beliefs[-1] if beliefs else Gaussian(flow[:1], np.array([[NILE_EPS]]))
    both = Gaussian(np.repeat(belief.mean, 2), np.full((2, 2), belief.cov[0, 0]))
    for z in flow[year:]:
        both = predict(both, np.eye(2), np.diag([NILE_ETA, 0.0]))
        both, _ = update(both, np.array([z]), np.array([[1.0, 0.0]]), np.array([NILE_EPS]))
    assert both.cov[1, 1] == pytest.approx(variance, rel=1e-8)
    if mean is not None:
        assert both.mean[1] == pytest.approx(mean, rel=1e-8)


def test_the_most_likely_nile_is_the_published_one(flow):
    """Durbin & Koopman's 15099 and 1469.1 are the maximum; 15067.643 and 1484.835, where
    statsmodels 0.15 stops, lie below it with log-likelihood -632.5457037878."""

    def minus(logs):
        eps, eta = np.exp(logs)
        return -after_first(flow, eta, eps)[2]

    start = np.log([NILE_EPS * 1.05, NILE_ETA * 0.9])
    best = minimize(minus, start, method="Nelder-Mead", options={"xatol": 1e-5, "fatol": 1e-9})
    assert np.exp(best.x) == pytest.approx([NILE_EPS, NILE_ETA], rel=1e-3)
    stopped = minus(np.log([15067.643, 1484.835]))
    assert stopped == pytest.approx(632.5457037878, abs=1e-8)
    assert best.fun < stopped


# Three nodes in a row, two of them read, made for this purpose; the series lies with the
# outside values.  Figures computed by four independent programs that agree to 1e-13.
FOLDER = os.environ.get("PLATEWATCH_DATA")
CHAIN = Path(FOLDER or "") / "kalman_case.npz"
has_chain = pytest.mark.skipif(
    not (FOLDER and CHAIN.is_file()), reason="PLATEWATCH_DATA names no folder with kalman_case.npz"
)


@cache
def chain():
    with np.load(CHAIN) as stored:
        return {name: stored[name] for name in stored.files}


def filtered_chain(key):
    """Beliefs and innovations over one of the two series; missing readings drop out."""
    c = chain()
    belief, beliefs, found = Gaussian(c["x0"], c["P0"]), [], []
    for t, z in enumerate(c[key]):
        if t:
            belief = predict(belief, c["F"], c["Q"], c["B"] @ c["U"][t - 1])
        there = np.flatnonzero(~np.isnan(z))
        belief, innovation = update(belief, z[there], c["H"][there], np.diag(c["R"])[there])
        beliefs.append(belief)
        found.append(innovation)
    return beliefs, found


def smoothed_start(key):
    """The first state given everything: a copy of it rides along."""
    c = chain()
    belief = Gaussian(np.tile(c["x0"], 2), np.kron(np.ones((2, 2)), c["P0"]))
    F, Q = block_diag(c["F"], np.eye(3)), block_diag(c["Q"], np.zeros((3, 3)))
    H = np.hstack((c["H"], np.zeros((2, 3))))
    for t, z in enumerate(c[key]):
        if t:
            push = np.concatenate((c["B"] @ c["U"][t - 1], np.zeros(3)))
            belief = predict(belief, F, Q, push)
        there = np.flatnonzero(~np.isnan(z))
        belief, _ = update(belief, z[there], H[there], np.diag(c["R"])[there])
    return belief.mean[3:], belief.cov[3:, 3:]


CASES = {
    "Zfull": (-372.7221877200, (56.1537153516, 33.4073220814, 24.9737256104)),
    "Z": (-357.5537277059, (56.1537078193, 33.4072587038, 24.9737193034)),
}
STARTS = {
    "Zfull": (-2.4959526174, 1.7954615476, -1.8653063575),
    "Z": (-2.4964040645, 1.8013875131, -1.8656848475),
}


@has_chain
@pytest.mark.parametrize("key", CASES)
def test_a_chain_of_nodes_is_filtered_as_four_programs_do(key):
    """Complete, and with 13 gaps of which 10 are in one thermocouple only."""
    likelihood, last = CASES[key]
    beliefs, found = filtered_chain(key)
    assert sum(i.log_likelihood for i in found) == pytest.approx(likelihood, rel=1e-8)
    assert beliefs[-1].mean == pytest.approx(np.array(last), rel=1e-8)
    mean, cov = smoothed_start(key)
    assert mean == pytest.approx(np.array(STARTS[key]), rel=1e-8)
    if key == "Zfull":
        assert np.trace(cov) == pytest.approx(1.4561681988, rel=1e-8)
        assert np.trace(beliefs[-1].cov) == pytest.approx(0.2321522311, rel=1e-8)
        assert np.mean([i.nis for i in found]) == pytest.approx(2.064401, abs=1e-6)


@has_chain
@pytest.mark.parametrize("key", CASES)
def test_a_chain_of_nodes_is_filtered_as_filterpy_does(key):
    """Step by step to 1e-8; filterpy takes the rows that are there."""
    c = chain()
    other = filterpy.kalman.KalmanFilter(dim_x=3, dim_z=2, dim_u=1)
    other.x, other.P, other.F, other.Q, other.B = c["x0"], c["P0"], c["F"], c["Q"], c["B"]
    beliefs, _ = filtered_chain(key)
    for t, z in enumerate(c[key]):
        if t:
            other.predict(u=c["U"][t - 1])
        there = np.flatnonzero(~np.isnan(z))
        if there.size:
            other.update(z[there], R=c["R"][np.ix_(there, there)], H=c["H"][there])
        assert beliefs[t].mean == pytest.approx(other.x, rel=1e-8, abs=1e-8)
        assert beliefs[t].cov == pytest.approx(other.P, rel=1e-8, abs=1e-8)


@has_chain
@pytest.mark.parametrize("key", CASES)
def test_a_chain_of_nodes_is_filtered_as_statsmodels_does(key):
    """Step by step to 1e-8; statsmodels drops the missing elements only."""
    c = chain()
    model = MLEModel(c[key], k_states=3)
    model["design"], model["obs_cov"], model["transition"] = c["H"], c["R"], c["F"]
    model["selection"], model["state_cov"] = np.eye(3), c["Q"]
    model.ssm["state_intercept"] = (c["B"] @ c["U"].T).copy()
    model.initialize_known(c["x0"], c["P0"])
    other = model.ssm.filter()
    beliefs, _ = filtered_chain(key)
    means = np.array([b.mean for b in beliefs])
    assert means == pytest.approx(other.filtered_state.T, rel=1e-8, abs=1e-8)
    covs = np.array([b.cov for b in beliefs])
    assert covs == pytest.approx(other.filtered_state_cov.transpose(2, 0, 1), rel=1e-8, abs=1e-8)


@has_chain
def test_the_chain_settles_at_the_steady_state_of_the_riccati_equation():
    """Traces and gain from scipy's solve_discrete_are."""
    c = chain()
    beliefs, _ = filtered_chain("Zfull")
    ahead = predict(beliefs[-1], c["F"], c["Q"])
    dare = solve_discrete_are(c["F"].T, c["H"].T, c["Q"], c["R"])
    assert ahead.cov == pytest.approx(dare, rel=1e-8, abs=1e-10)
    assert np.trace(ahead.cov) == pytest.approx(0.2995174232, rel=1e-8)
    push = np.zeros(2)
    moved = [
        update(ahead, c["H"] @ ahead.mean + push + e, c["H"], np.diag(c["R"]))[0].mean - ahead.mean
        for e in np.eye(2)
    ]
    gain = [
        [0.3018887467, 0.0035444759],
        [0.0406118395, 0.0368631392],
        [0.0035444759, 0.3056046237],
    ]
    assert np.transpose(moved) == pytest.approx(np.array(gain), rel=1e-8, abs=1e-9)
