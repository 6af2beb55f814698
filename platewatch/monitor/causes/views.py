"""The plate as each credible cause sees it: field, band, heat to come, reading errors."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from platewatch.monitor.causes.catalogue import Cause
from platewatch.monitor.causes.fuller import Fuller, held
from platewatch.monitor.causes.refine import Fit, Ints
from platewatch.monitor.causes.sentinel import Sentinel
from platewatch.monitor.causes.signatures import Bank
from platewatch.monitor.estimator import FieldState, Quiet
from platewatch.types import Array, Gaussian

MISMATCH = 0.1  # relative: what a fitted response still gets wrong
SETTLE_AHEAD_S = 120.0
DIRECTIONS = 6  # of the uncertainty of a fit that are followed


@dataclass(frozen=True)
class View:
    """One cause with its probability, and the plate under it.

    belief: mean (n,), cov (n, n) of the whole state
    missed (cells,): K to add to V a, what the filter's modes miss of the cause's heat
    heat_ahead (steps, r): modal watts of the cause along the horizon
    reading_error (ns,): K by which thermocouples will read off
    watts: what it adds or takes at present;  onset_us: since when
    lasting (r,): modal watts of the part that goes on;  lasting_share: of the present heat
    """

    parts: tuple[tuple[Cause, str], ...]
    probability: float
    belief: Gaussian
    missed: Array
    heat_ahead: Array
    reading_error: Array
    watts: float
    onset_us: int
    x_m: float
    y_m: float
    lasting: Array
    lasting_share: float

    @property
    def cause(self) -> Cause:
        return self.parts[0][0]

    @property
    def subject(self) -> str:
        return self.parts[0][1]


@dataclass(frozen=True)
class Course:
    """One fit's heat and reading errors over time since its onset.

    full (ticks, K), shadow (ticks, r): heat into both sets of modes;  state (ticks, n);
    error (ticks, m)
    """

    full: Array
    shadow: Array
    state: Array
    error: Array


def course(bank: Bank, f: Fit) -> Course:
    """The fitted heat and errors, tick by tick."""
    push, which = bank.push, bank.column_pattern[f.columns]
    values = _shape_values(bank, f.columns, f.age + 1) * f.amplitude
    return Course(
        values @ push.full[:, which].T,
        values @ push.shadow[:, which].T,
        values @ push.state[:, which].T,
        values @ push.error[:, which].T,
    )


def _shape_values(bank: Bank, columns: Ints, count: int) -> Array:
    """(count, c) shape of each column at each tick since the onset, as in `shaped`."""
    t = np.arange(count) * bank.push.tick_s
    out = np.empty((count, len(columns)))
    for shape in {bank.column_shape[c] for c in columns}:
        late = bank.push.tick_s if shape.kind in ("settle", "ramp") else 0.0
        same = [i for i, c in enumerate(columns) if bank.column_shape[c] == shape]
        out[:, same] = shape.at(t + late)[:, None]
    return out


def departure(
    quiet: Quiet, sentinel: Sentinel, fuller: Fuller, bank: Bank, c: Course
) -> tuple[Array, Array]:
    """How far the truth stands from the observer's mean (n,), and what the filter's modes
    miss of the field (cells,), at the latest tick."""
    push = bank.push
    full_decay, full_rise = held(fuller.rates, push.tick_s)
    decay, rise = held(quiet.reduced.rates, push.tick_s)
    follow = np.exp(-push.tick_s / push.lag_s)
    e, below = np.zeros(len(sentinel.F)), np.zeros(len(sentinel.sensors))
    y, a = np.zeros(fuller.rates.size), np.zeros(decay.size)
    warms = bool(c.shadow.any())
    for k in range(len(c.state)):
        e = sentinel.F @ e + c.state[k]
        if warms:
            y = full_decay * y + full_rise * c.full[k]
            a = decay * a + rise * c.shadow[k]
            missed = push.full_rows @ y - push.rows @ a
            below = follow * below + (1 - follow) * missed
        e = e - sentinel.K @ (sentinel.H @ e + below + c.error[k])
    return e, fuller.at_cells @ y - quiet.reduced.V @ a


def build_views(
    quiet: Quiet,
    sentinel: Sentinel,
    fuller: Fuller,
    bank: Bank,
    mean: Array,
    field: FieldState,
    fits: Sequence[Fit],
    probabilities: Sequence[float],
    times_s: Array,
) -> tuple[View, ...]:
    """The views of several fits.  mean (n,): the observer's;  times_s: steps of the horizon."""
    theta = quiet.blocks.theta
    views = []
    for f, p in zip(fits, probabilities, strict=True):
        e, missed = departure(quiet, sentinel, fuller, bank, course(bank, f))
        full = np.concatenate((mean + e, field.belief.mean[theta]))
        views.append(
            View(
                parts=f.parts,
                probability=p,
                belief=Gaussian(full, _spread(quiet, sentinel, bank, field, f, e)),
                missed=missed,
                heat_ahead=_heat_ahead(quiet, bank, f, times_s),
                reading_error=_error_ahead(quiet, sentinel, bank, f),
                watts=_watts(bank, f),
                onset_us=field.at_us - round(f.age * bank.push.tick_s * 1e6),
                x_m=f.x_m,
                y_m=f.y_m,
                lasting=_lasting(quiet, bank, f)[0],
                lasting_share=_lasting(quiet, bank, f)[1],
            )
        )
    return tuple(views)


def directions(sentinel: Sentinel, bank: Bank, f: Fit) -> Array:
    """(n, q) a root of what the uncertain size, place and course of a cause make of the
    state: the leading directions of the fit's covariance, each followed from the onset."""
    push, which = bank.push, bank.column_pattern[f.columns]
    left, size, _ = np.linalg.svd(f.spread, full_matrices=False)
    root = (left * size)[:, :DIRECTIONS]
    shapes = sorted({bank.column_shape[c] for c in f.columns}, key=lambda s: (s.kind, s.s))
    mine = [[i for i, c in enumerate(f.columns) if bank.column_shape[c] == s] for s in shapes]
    values = _shape_values(bank, f.columns, f.age + 1)[:, [m[0] for m in mine]]
    state = np.array([push.state[:, which[m]] @ root[m] for m in mine])
    error = np.array([push.error[:, which[m]] @ root[m] for m in mine])
    keep = np.eye(len(sentinel.F)) - sentinel.K @ sentinel.H
    F, (count, n, q) = keep @ sentinel.F, state.shape
    pushed = keep @ state - sentinel.K @ error
    pushes = (values @ pushed.reshape(count, -1)).reshape(-1, n, q)
    E = np.zeros((n, q))
    for heat in pushes:
        E = F @ E + heat
    return E


def _spread(
    quiet: Quiet, sentinel: Sentinel, bank: Bank, field: FieldState, f: Fit, e: Array
) -> Array:
    """Covariance: the observer's, the parameters', and how well the cause is known."""
    k, n = quiet.blocks, len(sentinel.F)
    cov = np.zeros((k.size, k.size))
    cov[:n, :n] = sentinel.cov
    cov[k.theta, k.theta] = field.belief.cov[k.theta, k.theta]
    D = directions(sentinel, bank, f)
    cov[:n, :n] += D @ D.T + MISMATCH**2 * np.outer(e, e)
    return cov


def _heat_ahead(quiet: Quiet, bank: Bank, f: Fit, times_s: Array) -> Array:
    """(steps, r) modal watts of the cause's heat at each step of the horizon."""
    t = f.age * bank.push.tick_s + times_s
    out = np.zeros((times_s.size, quiet.blocks.modes))
    for c, amount in zip(f.columns, f.amplitude, strict=True):
        pattern = bank.patterns[bank.column_pattern[c]]
        if pattern.heat is not None:
            modal = bank.push.modal[:, bank.column_pattern[c]]
            out += np.outer(amount * bank.column_shape[c].at(t), modal)
    return out


def _error_ahead(quiet: Quiet, sentinel: Sentinel, bank: Bank, f: Fit) -> Array:
    """(ns,) how far each thermocouple will be off once its fault has unfolded."""
    out = np.zeros(len(quiet.plate.sensors))
    now = f.age * bank.push.tick_s
    for c, amount in zip(f.columns, f.amplitude, strict=True):
        p = bank.column_pattern[c]
        shape = bank.column_shape[c]
        t = now + (SETTLE_AHEAD_S if shape.kind == "settle" else 0.0)
        out[list(sentinel.sensors)] += (
            bank.push.error[:, p] * amount * float(shape.at(np.array([t]))[0])
        )
    return out


def _watts(bank: Bank, f: Fit) -> float:
    """Heat that the cause adds (or takes, negative) at present, W."""
    t = np.array([f.age * bank.push.tick_s])
    total = 0.0
    for c, amount in zip(f.columns, f.amplitude, strict=True):
        heat = bank.patterns[bank.column_pattern[c]].heat
        if heat is not None:
            total += float(amount * bank.column_shape[c].at(t)[0] * heat.sum())
    return total


def _lasting(quiet: Quiet, bank: Bank, f: Fit) -> tuple[Array, float]:
    """Modal watts (r,) of the heat that does not die away, and its share of the present heat."""
    t = np.array([f.age * bank.push.tick_s])
    lasting, going, total = np.zeros(quiet.blocks.modes), 0.0, 0.0
    for c, amount in zip(f.columns, f.amplitude, strict=True):
        p, shape = bank.column_pattern[c], bank.column_shape[c]
        heat = bank.patterns[p].heat
        if heat is None:
            continue
        now = float(amount * shape.at(t)[0])
        total += abs(now * float(heat.sum()))
        if shape.kind != "decay":
            lasting += now * bank.push.modal[:, p]
            going += abs(now * float(heat.sum()))
    return lasting, going / total if total > 0 else 0.0
