"""Cost of one tick of the demo plate, beside other programs on the same matrices.

Run `python tests/bench/bench_tick.py` with OPENBLAS_NUM_THREADS=1; CPU microseconds, the
best of eight.  `--steps N` adds N steps of a small filter with tiny R and tells the
smallest eigenvalue it met.  Fails when a budget is passed: one step of the filter 200 us
and a third of filterpy's; a forecast 10 ms; replay 500 ticks a second, 100 with causes.
Budgets hold on an idle core.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable
from pathlib import Path

import filterpy.kalman
import numpy as np
from statsmodels.tsa.statespace.mlemodel import MLEModel

from platewatch.compose import build_monitor, describe
from platewatch.monitor import forecast, inputs, peak, pipeline
from platewatch.monitor.control import loop_start
from platewatch.monitor.estimator import advance, forecast_step
from platewatch.monitor.kalman import Coupling, predict, predict_coupled, update
from platewatch.monitor.peak import WHOLE_PLATE
from platewatch.types import Gaussian, Reading, Tick
from sim_sensors.simulation import Plant, simulate

DEMO = Path(__file__).parents[2] / "config" / "demo-table.toml"
TICK_US = 2_000_000
BUDGET_STEP_US, BUDGET_TIMES, BUDGET_FORECAST_US, BUDGET_TICKS = 200.0, 3.0, 10_000.0, 500.0
BUDGET_CAUSES = 100.0


def best_us(work: Callable[[], object], number: int = 50, repeat: int = 8) -> float:
    spent = []
    for _ in range(repeat):
        start = time.process_time()
        for _ in range(number):
            work()
        spent.append((time.process_time() - start) / number)
    return 1e6 * min(spent)


def recorded(plate, until_s: float) -> list[Tick]:
    t0, ticks = 1_800_000_000_000_000, []
    for s in simulate(Plant(plate), "clean", until_s=until_s):
        at = t0 + round(s.at_s * 1e6)
        said = sorted(s.readings.items())
        ticks.append(Tick(at, TICK_US, tuple(Reading(at, k, v, at) for k, v in said)))
    return ticks


def resident_MB() -> float:
    """What the process holds now (Linux)."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("VmRSS"):
            return float(line.split()[1]) / 1024
    return float("nan")


def same_matrices(monitor, state, seen):
    """Belief, F, Q, push, H, R and readings of one tick as anyone would be given them."""
    q, k = monitor.quiet, monitor.quiet.blocks
    step = q.steps.of(TICK_US)
    F = step.F.copy()
    F[:, k.theta] += step.modal @ np.full((k.modes, k.parameters), 1e-3)
    push = step.constant + step.around @ state.picture.around
    rows = list(seen.sensors)
    return state.picture.belief, F, step.Q, push, q.H[rows], q.noise_var[rows], seen.degC, step


def others(monitor, state, seen) -> dict[str, float]:
    """One predict and update on the same matrices, by several programs."""
    belief, F, Q, push, H, R, z, step = same_matrices(monitor, state, seen)
    k, n, m = monitor.quiet.blocks, belief.mean.size, z.size
    couplings = (
        *step.couplings,
        Coupling(k.a, k.theta, F[k.a, k.theta]),
        Coupling(k.L, k.theta, F[k.L, k.theta]),
    )
    kf = filterpy.kalman.KalmanFilter(dim_x=n, dim_z=m, dim_u=1)
    kf.F, kf.Q, kf.H, kf.R = F, Q, H, np.diag(R)
    kf.B = push[:, None]

    def by_filterpy():
        kf.x, kf.P = belief.mean.copy(), belief.cov
        kf.predict(u=np.ones(1))
        kf.update(z)

    count = 200
    model = MLEModel(np.tile(z, (count, 1)), k_states=n)
    model["design"], model["obs_cov"], model["transition"] = H, np.diag(R), F
    model["selection"], model["state_cov"] = np.eye(n), Q
    model.ssm["state_intercept"] = np.tile(push[:, None], (1, count))
    model.initialize_known(belief.mean, belief.cov)
    model.ssm.tolerance = 0  # else it stops working once it has converged

    def dense():
        update(predict(belief, F, Q, push), z, H, R)

    def bare():
        P = F @ belief.cov @ F.T
        HP = H @ P
        HP.T @ HP  # one product of rank m

    ours = update(predict_coupled(belief, step.keep, couplings, Q, push), z, H, R)[0]
    by_filterpy()
    assert np.allclose(kf.x.ravel(), ours.mean, rtol=1e-8, atol=1e-8)
    assert np.allclose(kf.P, ours.cov, rtol=1e-6, atol=1e-9)
    return {
        "platewatch, couplings": best_us(
            lambda: update(predict_coupled(belief, step.keep, couplings, Q, push), z, H, R)
        ),
        "platewatch, dense": best_us(dense),
        "filterpy": best_us(by_filterpy),
        "statsmodels": best_us(lambda: model.ssm.filter(), 1) / count,
        "bare dense products": best_us(bare),
    }


def parts(monitor, state, tick) -> dict[str, float]:
    """What a tick is made of."""
    q, where, Z = monitor.quiet, monitor.where, monitor.draws
    belief = state.picture.belief
    _, seen = inputs.take_in(q, state.heard, tick, monitor.unit)
    around = seen.around
    options = monitor.forecast

    def begin():
        times = forecast.horizon_times(options)
        return loop_start(monitor.loops, monitor.recipes, times, state.heard, state.integral)

    start = begin()
    X = forecast.state_draws(state.picture, Z)
    path = forecast.carry(q, state.picture, monitor.loops, start, X, options)

    def ahead():
        drawn = forecast.state_draws(state.picture, Z)
        carried = forecast.carry(q, state.picture, monitor.loops, begin(), drawn, options)
        forecast.hottest_ahead(q, where, carried, WHOLE_PLATE)

    return {
        "readings taken in": best_us(lambda: inputs.take_in(q, state.heard, tick, monitor.unit)),
        "predict": best_us(lambda: forecast_step(q, state.picture, TICK_US, seen.called_W, around)),
        "predict and update": best_us(lambda: advance(q, state.picture, TICK_US, seen)),
        "peak now": best_us(lambda: peak.hottest_now(q, where, belief, Z, WHOLE_PLATE)),
        "forecast: draws": best_us(lambda: forecast.state_draws(state.picture, Z)),
        "forecast: horizon": best_us(
            lambda: forecast.carry(q, state.picture, monitor.loops, start, X, options), 5
        ),
        "forecast: peak": best_us(lambda: forecast.hottest_ahead(q, where, path, WHOLE_PLATE), 5),
        "one forecast": best_us(ahead, 5),
    }


def replay(monitor, ticks) -> tuple[float, float, float]:
    """Ticks a second through the pipeline, no database; median microseconds of a tick
    without and with a forecast."""
    state, without, with_one = pipeline.first(monitor), [], []
    for tick in ticks:
        start = time.process_time()
        state, outcome = pipeline.step(monitor, state, tick)
        spent = time.process_time() - start
        (with_one if outcome.limits else without).append(1e6 * spent)
    rate = 1e6 * len(ticks) / (sum(without) + sum(with_one))
    return rate, float(np.median(without)), float(np.median(with_one))


def many_steps(count: int) -> float:
    """Smallest eigenvalue over many steps with R = 1e-12, readings missing now and then."""
    F = np.array([[0.999, 0.0005, 0.0], [0.2, 0.8, 0.0], [0.0, 0.0, 1.0]])
    Q, H = np.diag([1e-6, 1e-9, 1e-12]), np.array([[0.0, 1.0, 1.0], [1.0, 0.0, 0.0]])
    R, belief, least = (
        np.full(2, 1e-12),
        Gaussian(np.full(3, 20.0), np.diag([400.0, 400.0, 1])),
        1.0,
    )
    rows = [np.array([0, 1]), np.array([0]), np.array([1])]
    for t in range(count):
        there = rows[t % 3]
        belief, _ = update(predict(belief, F, Q), np.full(there.size, 20.0), H[there], R[there])
        if t % 1000 == 0:
            least = min(least, float(np.linalg.eigvalsh(belief.cov).min()))
            assert np.array_equal(belief.cov, belief.cov.T)
    return least


def main() -> int:
    arguments = argparse.ArgumentParser(description=__doc__)
    arguments.add_argument("--steps", type=int, default=0)
    steps = arguments.parse_args().steps
    before = resident_MB()
    description = describe(DEMO)
    start = time.process_time()
    monitor = build_monitor(description, causes=False)
    built_s = time.process_time() - start
    ticks = recorded(description.plate, 1200.0)
    state = pipeline.first(monitor)
    for tick in ticks[:500]:
        state, _ = pipeline.step(monitor, state, tick)
    _, seen = inputs.take_in(monitor.quiet, state.heard, ticks[500], monitor.unit)
    print(
        f"{monitor.quiet.blocks.size} states, {seen.degC.size} readings, built in {built_s:.2f} s"
    )
    print(f"memory {before:.0f} MB with libraries loaded, {resident_MB():.0f} MB watching")
    found, beside = parts(monitor, state, ticks[500]), others(monitor, state, seen)
    for name, us in found.items():
        print(f"{name:28} {us:8.0f} us")
    ours = beside["platewatch, couplings"]
    for name, us in beside.items():
        print(f"{name:28} {us:8.0f} us  {us / ours:6.2f} x")
    rate, without, with_one = max(replay(monitor, ticks) for _ in range(2))
    print(f"{'replay, causes off':28} {rate:8.0f} ticks/s, a tick {without:.0f} us,", end=" ")
    print(f"with a forecast {with_one:.0f} us")
    every = build_monitor(description)
    causes_rate, without, with_one = replay(every, ticks[:300])
    print(f"{'replay, causes on':28} {causes_rate:8.0f} ticks/s, a tick {without:.0f} us,", end=" ")
    print(f"with a forecast {with_one:.0f} us")
    if steps:
        print(f"smallest eigenvalue in {steps} steps: {many_steps(steps):.3g}")
    kept = {
        f"filter step <= {BUDGET_STEP_US:.0f} us": found["predict and update"] <= BUDGET_STEP_US,
        f"filterpy / {BUDGET_TIMES:.0f}": beside["filterpy"] >= BUDGET_TIMES * ours,
        "forecast": found["one forecast"] <= BUDGET_FORECAST_US,
        f"replay >= {BUDGET_TICKS:.0f} ticks/s": rate >= BUDGET_TICKS,
        f"causes on >= {BUDGET_CAUSES:.0f} ticks/s": causes_rate >= BUDGET_CAUSES,
    }
    for name, good in kept.items():
        print(f"{name:28} {'kept' if good else 'PASSED'}")
    return 0 if all(kept.values()) else 1


if __name__ == "__main__":
    sys.exit(main())
