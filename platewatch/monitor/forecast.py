"""The coming peak: every draw of the present state carried over the horizon.

Controllers are emulated draw by draw, disturbances are held, and the spread is
that of the present belief with the quiet noise only.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from platewatch.monitor.estimator import FieldState, Quiet, sensitivities
from platewatch.monitor.loops import Controllers, Loops, LoopStart
from platewatch.monitor.options import ForecastOptions
from platewatch.monitor.peak import (
    MARGIN_SD,
    Hottest,
    NDArrayInt,
    Places,
    candidates,
    most_common,
    square_root,
    values_of,
)
from platewatch.monitor.transition import Step
from platewatch.types import Array

DRAWS_AHEAD = 64
REFRESH_S = 60.0  # the remainder of the losses is evaluated this often along the way
REFRESH_TABLES_S = 20.0  # the same with cp(T), which weighs what the heaters do meanwhile
NEAR_S = 60.0  # every step is looked at up to here, every third one beyond


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


@dataclass(frozen=True)
class _Stack:
    """One step of field, controlled readings, heaters and calls, stacked as rows.

    The rows of Z are [a (r), R (nz), p (nz), c (nz)]: modes, what each zone's control
    thermocouple reads, heater output and watts called for.  The field takes its heat
    from p and c (`heat`), else only decays (`keep`).  `rest_of` picks the rows of a push,
    `modal` (r + nz, r) are those of modal heat.
    """

    keep: Array  # (r, 1)
    heat: Array  # (r, 2 nz)
    lower: Array  # (2 nz, r + 3 nz): the next R and p
    rest_of: NDArrayInt
    modal: Array


def _stack(quiet: Quiet, loops: Loops, step: Step) -> _Stack:
    k, nz = quiet.blocks, quiet.blocks.zones
    junction = k.L.start + loops.sensor
    lag = np.diag(step.keep[junction])
    reading = (step.F[junction, k.a], lag, step.heater[junction], step.called[junction])
    nothing = np.zeros((nz, k.modes + nz))
    output = (nothing, np.diag(step.decay), np.diag(1 - step.decay))
    rest_of = np.concatenate((np.arange(k.modes), junction))
    return _Stack(
        keep=step.keep[k.a][:, None],
        heat=np.hstack((step.heater[k.a], step.called[k.a])),
        lower=np.vstack((np.hstack(reading), np.hstack(output))),
        rest_of=rest_of,
        modal=step.modal[rest_of],
    )


def carry(
    quiet: Quiet,
    state: FieldState,
    loops: Loops,
    start: LoopStart,
    X: Array,
    options: ForecastOptions,
    heat_ahead: Array | None = None,
) -> Path:
    """Carry the draws X (n, N) over the horizon.

    heat_ahead (steps, r): modal watts of a cause, step by step
    """
    k, N = quiet.blocks, X.shape[1]
    r, nz = k.modes, k.zones
    times = horizon_times(options)
    step = quiet.steps.of(round(options.step_s * 1e6), hold=True)
    stack = _stack(quiet, loops, step)
    control = loops.sensor
    beta = X[k.beta][control]
    Z = np.empty((r + 3 * nz, N))
    a, R, p, c = np.split(Z, (r, r + nz, r + 2 * nz))
    a[:], R[:], p[:] = X[k.a], X[k.L][control] + beta, state.heater_W[:, None]
    held = _held_push(quiet, state, step, stack, X)
    held[r:] += (1 - step.keep[k.L][control])[:, None] * beta
    controllers = Controllers(loops, start, R, options.step_s)
    looked_at = _looks(times)
    modes, asked = np.empty((looked_at.size + 1, r, N)), np.empty((looked_at.size + 1, nz))
    modes[0], asked[0] = a, state.called_W
    keep, even = np.repeat(stack.keep, N, axis=1), np.full(N, 1 / N)
    heated, below, look = np.empty((r, N)), np.empty((2 * nz, N)), 1
    rest = held
    often_s = REFRESH_S if quiet.reduced.properties is None else REFRESH_TABLES_S
    refresh = max(1, round(often_s / options.step_s))
    for i in range(times.size):
        if i % refresh == 0:
            rest = held + _modal_heat(quiet, state, stack, a, p, X)
        c[:] = controllers.called_W(R, start.set_points[:, i])
        np.dot(stack.lower, Z, out=below)
        np.dot(stack.heat, Z[r + nz :], out=heated)
        a *= keep
        a += heated
        a += rest[:r]
        Z[r : r + 2 * nz] = below
        R += rest[r:]
        if heat_ahead is not None:
            push = stack.modal @ heat_ahead[i]
            a += push[:r, None]
            R += push[r:, None]
        if look <= looked_at.size and looked_at[look - 1] == i:
            modes[look], asked[look] = a, c @ even
            look += 1
    return Path(np.concatenate(([0.0], times[looked_at])), modes, asked)


def _looks(times: Array) -> NDArrayInt:
    """Steps whose fields are kept: all of the first minute, every third one, the last."""
    number = np.arange(times.size)
    kept = (times <= NEAR_S) | ((number + 1) % 3 == 0) | (number + 1 == times.size)
    return np.flatnonzero(kept)


def _held_push(quiet: Quiet, state: FieldState, step: Step, stack: _Stack, X: Array) -> Array:
    """(r + nz, N) push of everything that is held over the horizon."""
    disturbed = slice(quiet.blocks.d.start, quiet.blocks.b.stop)
    held = step.F[stack.rest_of, disturbed] @ X[disturbed]
    held += (step.around @ state.around + step.constant)[stack.rest_of][:, None]
    if state.extra is not None:
        held += (stack.modal @ state.extra)[:, None]
    return held


def _modal_heat(
    quiet: Quiet, state: FieldState, stack: _Stack, a: Array, p: Array, X: Array
) -> Array:
    """(r + nz, N) push over one step of the losses' remainder and of each draw's theta."""
    k = quiet.blocks
    even = np.full(X.shape[1], 1 / X.shape[1])
    delivered = p @ even + state.belief.mean[k.d]
    bump, held_s = state.belief.mean[k.b], REFRESH_TABLES_S
    S = sensitivities(quiet, a @ even, delivered, bump, state.around, held_s)
    push = stack.modal @ S
    return np.asarray(push[:, :-1] @ X[k.theta] + push[:, -1][:, None])


def hottest_ahead(
    quiet: Quiet, where: Places, path: Path, region: str, missed: Array | None = None
) -> tuple[Hottest, Array]:
    """The coming peak of a region, and the maximum of each draw at each look (looks, N).

    missed (cells,): K to add to every field, what its modes cannot show
    """
    place, N = where.regions[region], path.modes.shape[2]
    means = path.modes @ np.full(N, 1 / N)
    spread = np.ascontiguousarray(
        (path.modes - means[:, :, None]).astype(np.float32).transpose(0, 2, 1)
    )
    fields = means.astype(np.float32) @ place.short_rows.T
    if missed is not None:
        fields += missed[place.cells].astype(np.float32)
    hottest = place.short_rows[fields.argmax(axis=1)]
    margins = MARGIN_SD * np.matmul(spread, hottest[:, :, None])[:, :, 0].std(axis=1) + 0.1
    found = candidates(place, fields, margins)
    exact = means @ place.rows[found].T
    if missed is not None:
        exact += missed[place.cells[found]]
    base, values = values_of(place, found, exact, spread)
    tops = values.max(axis=2)
    when = tops.argmax(axis=0)
    draw = np.arange(N)
    cells = place.cells[found[values[when, draw].argmax(axis=1)]]
    samples = base + tops[when, draw].astype(np.float64)
    at_s = float(np.median(path.times_s[when]))
    return Hottest(samples, most_common(cells), at_s), base + tops.astype(np.float64)


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
