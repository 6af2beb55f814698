"""What each hypothesis does to the sentinel's innovations, by age.

The true plate departs from the modelled one, the observer follows with its gain,
and what is left over shows in the innovations: e' = F e + push, s = H e + direct,
e = e' - K s.  What the filter's modes miss of a source comes from the fuller model.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from platewatch.monitor.causes.catalogue import Family, Pattern, Shape
from platewatch.monitor.causes.fuller import Fuller, held
from platewatch.monitor.causes.sentinel import Sentinel
from platewatch.monitor.estimator import Quiet
from platewatch.thermal.reduction import flux_modes
from platewatch.types import Array

WINDOW_S = 1080.0
Float32 = NDArray[np.float32]


@dataclass(frozen=True)
class Push:
    """How patterns enter, per unit amplitude.

    state (n, P): push of the state per tick;  error (m, P): error of readings
    modal (r, P) watts into the filter's modes
    full (K, P), shadow (r, P): watts into both sets of modes where the filter's may miss
    something; none for heaters, which the filter's modes were made for
    rows (m, r), full_rows (m, K): the field at the sensors in both
    """

    state: Array
    error: Array
    modal: Array
    full: Array
    shadow: Array
    rows: Array
    full_rows: Array
    lag_s: Array
    tick_s: float


@dataclass(frozen=True)
class Bank:
    """The signatures of all hypotheses.

    patterns (P) and shapes make the columns: pattern[c], shape[c]
    signature (ages, M, m): whitened innovations per unit amplitude
    energy (ages, M): their squares, summed up to each age;  scale_m: sqrt of the plate's area
    root (m, m): turns whitened innovations back into K
    made: what follows from the columns and is asked for again and again
    """

    patterns: tuple[Pattern, ...]
    column_pattern: NDArray[np.int64]
    column_shape: tuple[Shape, ...]
    signature: Float32
    energy: Float32
    push: Push
    root: Array
    scale_m: float
    made: dict[object, object] = field(default_factory=dict, compare=False, repr=False)

    @property
    def ages(self) -> int:
        return int(self.signature.shape[0])


def build_push(
    quiet: Quiet,
    sentinel: Sentinel,
    fuller: Fuller,
    patterns: list[Pattern],
    tick_us: int,
) -> Push:
    """Patterns in the coordinates of the observer and of the fuller model."""
    cells, ns = quiet.grid.n, len(quiet.plate.sensors)
    heat = np.column_stack([np.zeros(cells) if p.heat is None else p.heat for p in patterns])
    error = np.column_stack([np.zeros(ns) if p.error is None else p.error for p in patterns])
    undeclared = np.array([float(p.family is not Family.ZONE) for p in patterns])
    listened = list(sentinel.sensors)
    step, system = quiet.steps.of(tick_us), quiet.steps.system
    modal = flux_modes(quiet.reduced, heat)
    return Push(
        state=step.modal[: len(sentinel.F)] @ modal,
        error=error[listened],
        modal=modal,
        full=fuller.gain(heat * undeclared),
        shadow=modal * undeclared,
        rows=system.sensors[listened],
        full_rows=fuller.at_sensors[listened],
        lag_s=system.sensor_lag_s[listened],
        tick_s=tick_us / 1e6,
    )


def missed_pulse(quiet: Quiet, fuller: Fuller, push: Push, ages: int) -> Array:
    """(ages, m, P) K at the sensors that the filter's modes miss, after one tick of heat."""
    out = np.zeros((ages, push.rows.shape[0], push.modal.shape[1]))
    t = np.arange(ages)[:, None] * push.tick_s
    for rates, rows, gain, sign in (
        (fuller.rates, push.full_rows, push.full, 1.0),
        (quiet.reduced.rates, push.rows, push.shadow, -1.0),
    ):
        _, rise = held(rates, push.tick_s)
        fade = np.exp(-t * rates[None, :])
        for i, row in enumerate(rows):
            out[:, i] += sign * (fade * (row * rise)) @ gain
    return out


def pulse_responses(sentinel: Sentinel, push: Push, missed: Array) -> Array:
    """(ages, m, P) innovations after one tick of unit heat, or one reading in error.

    missed: from `missed_pulse`; it reaches the readings through their lag
    """
    ages, m, count = missed.shape
    e, below = np.zeros((len(sentinel.F), count)), np.zeros((m, count))
    follow = np.exp(-push.tick_s / push.lag_s)[:, None]
    found = np.empty((ages, m, count))
    for age in range(ages):
        e = sentinel.F @ e
        if age == 0:
            e += push.state
        below = follow * below + (1 - follow) * missed[age]
        s = sentinel.H @ e + below
        if age == 0:
            s = s + push.error
        e = e - sentinel.K @ s
        found[age] = s
    return found


def shaped(pulse: Array, shape: Shape, tick_s: float) -> Array:
    """Response (ages, ...) to a shape, from the response to one tick of it."""
    match shape.kind:
        case "step":
            return np.cumsum(pulse, axis=0)
        case "decay":
            keep = np.exp(-tick_s / shape.s)
            return _filtered(pulse, keep)
        case "settle":
            keep = np.exp(-tick_s / shape.s)
            return np.asarray(np.cumsum(pulse, axis=0) - keep * _filtered(pulse, keep))
        case "grow":
            step = np.cumsum(pulse, axis=0)
            return np.asarray(step + (np.cumsum(step, axis=0) - step) * tick_s / shape.s)
        case _:
            return np.asarray(np.cumsum(np.cumsum(pulse, axis=0), axis=0) * tick_s / shape.s)


def _filtered(pulse: Array, keep: float) -> Array:
    out = np.empty_like(pulse)
    last = np.zeros_like(pulse[0])
    for age, value in enumerate(pulse):
        last = keep * last + value
        out[age] = last
    return out


def build_bank(
    quiet: Quiet, sentinel: Sentinel, fuller: Fuller, patterns: list[Pattern], tick_us: int
) -> Bank:
    """All signatures over WINDOW_S (at least 60 ticks)."""
    push = build_push(quiet, sentinel, fuller, patterns, tick_us)
    ages = max(60, round(WINDOW_S / push.tick_s))
    pulse = pulse_responses(sentinel, push, missed_pulse(quiet, fuller, push, ages))
    columns = [(p, shape) for p, pattern in enumerate(patterns) for shape in pattern.shapes]
    signature = np.empty((ages, len(columns), len(sentinel.sensors)), dtype=np.float32)
    for shape in {shape for _, shape in columns}:
        where = [c for c, (_, s) in enumerate(columns) if s == shape]
        which = [columns[c][0] for c in where]
        response = shaped(pulse[:, :, which], shape, push.tick_s)
        signature[:, where] = np.einsum("ij,ajp->api", sentinel.whiten, response)
    energy = np.cumsum(np.einsum("acm,acm->ac", signature, signature), axis=0, dtype=np.float32)
    return Bank(
        tuple(patterns),
        np.array([p for p, _ in columns]),
        tuple(shape for _, shape in columns),
        signature,
        energy,
        push,
        np.asarray(np.linalg.inv(sentinel.whiten), dtype=np.float64),
        float(np.sqrt(quiet.grid.area.sum())),
    )
