"""The coming peak: every draw of the present state carried over the horizon.

Controllers are emulated draw by draw, disturbances are held, and the spread is
that of the present belief with the quiet noise only.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from platewatch.monitor.estimator import FieldState, Quiet, sensitivities
from platewatch.monitor.loops import Loops
from platewatch.monitor.options import ForecastOptions
from platewatch.monitor.peak import (
    MARGIN_SD,
    Hottest,
    NDArrayBool,
    NDArrayInt,
    Places,
    candidates,
    most_common,
    square_root,
)
from platewatch.monitor.transition import Step
from platewatch.types import Array

DRAWS_AHEAD = 64
REFRESH_S = 60.0  # the remainder of the losses is evaluated this often along the way
NEAR_S = 60.0  # every step is looked at up to here, every third one beyond


@dataclass(frozen=True)
class LoopStart:
    """What the controllers are doing now.

    duty (nz,): 0..1 as logged;  integral (nz,): part of it that the error does not explain;
    set_points (nz, steps): along the horizon;  live (nz,): loop and both are known
    """

    duty: Array
    integral: Array
    set_points: Array
    live: NDArrayBool


@dataclass(frozen=True)
class Path:
    """The draws along the horizon: modes (looks, r, draws) at times_s (looks,)."""

    times_s: Array
    modes: Array
    called_W: Array  # (looks, nz) mean over the draws


def horizon_times(options: ForecastOptions) -> Array:
    """End of each step, s."""
    count = round(options.horizon_s / options.step_s)
    return np.asarray(np.arange(1, count + 1) * options.step_s, dtype=np.float64)


def state_draws(state: FieldState, Z: Array) -> Array:
    """(n, draws) of the whole state; the draws' mean is the belief's mean."""
    root = square_root(state.belief.cov)
    return np.asarray(state.belief.mean[:, None] + root @ Z[:, _spread_columns(Z)])


def _spread_columns(Z: Array) -> NDArrayInt:
    """The first draws and their mirror images, which lie half the width further on."""
    half, total = DRAWS_AHEAD // 2, Z.shape[1] // 2
    return np.concatenate((np.arange(half), total + np.arange(half)))


def carry(
    quiet: Quiet,
    state: FieldState,
    loops: Loops,
    start: LoopStart,
    X: Array,
    options: ForecastOptions,
) -> Path:
    """Carry the draws X (n, N) over the horizon."""
    k = quiet.blocks
    times = horizon_times(options)
    step = quiet.steps.of(round(options.step_s * 1e6), hold=True)
    moving = np.r_[k.a, k.L]
    F = np.ascontiguousarray(step.F[np.ix_(moving, moving)])
    held = step.F[moving][:, np.r_[k.d, k.b]] @ X[np.r_[k.d, k.b]]
    held += (step.around @ state.around + step.constant)[moving][:, None]
    heater, called = step.heater[moving], step.called[moving]
    y = X[moving]
    p = np.repeat(state.heater_W[:, None], X.shape[1], axis=1)
    control = loops.sensor.astype(np.int64)
    beta = X[k.beta][control]
    integral = np.repeat(start.integral[:, None], X.shape[1], axis=1)
    live = (start.live & (loops.closed > 0))[:, None]
    duty_now = np.repeat(start.duty[:, None], X.shape[1], axis=1)
    before = y[k.modes + control] + beta
    looks, modes, asked = [0.0], [y[: k.modes].copy()], [state.called_W]
    rest = held
    refresh = max(1, round(REFRESH_S / options.step_s))
    for i, t in enumerate(times):
        if i % refresh == 0:
            rest = held + _modal_heat(quiet, state, step, y, p, X)[moving]
        reading = y[k.modes + control] + beta
        error = start.set_points[:, i][:, None] - reading
        error = np.where(live, error, 0.0)
        wanted = loops.duty_for(error, integral, (reading - before) / options.step_s)
        integral = loops.next_integral(error, integral, wanted, options.step_s)
        duty = np.where(live, np.clip(wanted, loops.low[:, None], loops.high[:, None]), duty_now)
        before = reading
        c = loops.watts(duty)
        y = F @ y + heater @ p + called @ c + rest
        p = step.decay[:, None] * p + (1 - step.decay)[:, None] * c
        if t <= NEAR_S or (i + 1) % 3 == 0 or i + 1 == times.size:
            looks.append(float(t))
            modes.append(y[: k.modes])
            asked.append(c.mean(axis=1))
    return Path(np.array(looks), np.array(modes), np.array(asked))


def _modal_heat(quiet: Quiet, state: FieldState, step: Step, y: Array, p: Array, X: Array) -> Array:
    """(n, N) push over one step of the losses' remainder and of each draw's theta."""
    k = quiet.blocks
    S = sensitivities(
        quiet,
        y[: k.modes].mean(axis=1),
        p.mean(axis=1) + X[k.d].mean(axis=1),
        X[k.b].mean(axis=1),
        state.around,
    )
    return np.asarray(step.modal @ (S[:, :3] @ X[k.theta] + S[:, 3][:, None]))


def hottest_ahead(quiet: Quiet, where: Places, path: Path, region: str) -> tuple[Hottest, Array]:
    """The coming peak of a region, and the maximum of each draw at each look (looks, N)."""
    V = quiet.reduced.V
    means = path.modes.mean(axis=2)
    fields = V @ means.T
    cells = _cells_ahead(where, V, path, fields, region)
    count, r, n = path.modes.shape
    flat = path.modes.transpose(1, 0, 2).reshape(r, count * n)
    values = (V[cells] @ flat).reshape(cells.size, count, n)
    tops = values.max(axis=0)
    when = tops.argmax(axis=0)
    draw = np.arange(n)
    at_cell = cells[values[:, when, draw].argmax(axis=0)]
    samples = tops[when, draw]
    return (
        Hottest(samples, most_common(at_cell), float(np.median(path.times_s[when]))),
        np.asarray(tops),
    )


def _cells_ahead(where: Places, V: Array, path: Path, fields: Array, region: str) -> NDArrayInt:
    """Candidate cells over the whole horizon."""
    found = []
    for look in range(path.times_s.size):
        inside = np.where(where.regions[region], fields[:, look], -np.inf)
        top = int(inside.argmax())
        margin = MARGIN_SD * float((V[top] @ path.modes[look]).std()) + 0.1
        found.append(candidates(where, fields[:, look], margin, region))
    return np.unique(np.concatenate(found))


def crossing_times(times_s: Array, tops: Array, limit: float) -> Array:
    """First time each draw passes the limit, linear between looks; inf if never.  (N,)"""
    over = tops > limit
    first = over.argmax(axis=0)
    draw = np.arange(tops.shape[1])
    before = np.maximum(first - 1, 0)
    low, high = tops[before, draw], tops[first, draw]
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(first > 0, (limit - low) / (high - low), 0.0)
    at = times_s[before] + share * (times_s[first] - times_s[before])
    return np.where(over.any(axis=0), at, np.inf)


def quantile_times(times_s: Array) -> tuple[float | None, float | None, float | None]:
    """5, 50, 95 % of crossing times of which some may be infinite."""
    ordered = np.sort(times_s)
    ranks = [int(np.ceil(p * (ordered.size - 1))) for p in (0.05, 0.5, 0.95)]
    low, mid, high = (float(v) if np.isfinite(v) else None for v in ordered[ranks])
    return low, mid, high
