"""What each hypothesis does to the sentinel's innovations, by age.

The true plate departs from the modelled one, the observer follows with its gain,
and what is left over shows in the innovations: e' = F e + push, s = H e + direct,
e = e' - K s.  Sources carry the ramped static correction of what the modes miss.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from platewatch.monitor.causes.catalogue import Pattern, Shape
from platewatch.monitor.causes.sentinel import Sentinel
from platewatch.monitor.estimator import Quiet
from platewatch.thermal.grid import point_row
from platewatch.thermal.reduction import flux_modes, static_correction
from platewatch.types import Array

WINDOW_S = 900.0
Float32 = NDArray[np.float32]


@dataclass(frozen=True)
class Push:
    """How patterns enter: (n, P) state push per tick of unit heat, and what modes miss.

    corner (m, P): static correction at the sensors, K per W;  tau_s (P,) its rise
    error (m, P): error of readings per unit
    """

    state: Array
    corner: Array
    tau_s: Array
    error: Array
    lag_s: Array
    tick_s: float


@dataclass(frozen=True)
class Bank:
    """The signatures of all hypotheses.

    patterns (P) and shapes make the columns: pattern[c], shape[c]
    signature (ages, M, m): whitened innovations per unit amplitude
    energy (ages, M): their squares, summed up to each age
    """

    patterns: tuple[Pattern, ...]
    column_pattern: NDArray[np.int64]
    column_shape: tuple[Shape, ...]
    signature: Float32
    energy: Float32
    push: Push

    @property
    def ages(self) -> int:
        return int(self.signature.shape[0])


def build_push(
    quiet: Quiet, sentinel: Sentinel, patterns: list[Pattern], tick_us: int
) -> Push:
    """Patterns in the coordinates of the observer."""
    n, m, count = len(sentinel.F), len(sentinel.sensors), len(patterns)
    state, corner = np.zeros((n, count)), np.zeros((m, count))
    tau, error = np.ones(count), np.zeros((m, count))
    step = quiet.steps.of(tick_us)
    rows = np.array(
        [point_row(quiet.grid, s.x_m, s.y_m) for s in quiet.plate.sensors]
    )[list(sentinel.sensors)]
    for p, pattern in enumerate(patterns):
        if pattern.heat is not None:
            state[:, p] = step.modal[:n] @ flux_modes(quiet.reduced, pattern.heat[:, None])[:, 0]
            w, tau[p] = static_correction(quiet.reduced, pattern.heat)
            corner[:, p] = rows @ w
        if pattern.error is not None:
            error[:, p] = pattern.error[list(sentinel.sensors)]
    lags = quiet.steps.system.sensor_lag_s[list(sentinel.sensors)]
    return Push(state, corner, tau, error, lags, tick_us / 1e6)


def pulse_responses(sentinel: Sentinel, push: Push, ages: int) -> Array:
    """(ages, m, P) innovations after one tick of unit heat, or one reading in error."""
    m, count = push.corner.shape
    e = np.zeros((len(sentinel.F), count))
    rise, below = np.zeros(count), np.zeros((m, count))
    fade = np.exp(-push.tick_s / push.tau_s)
    follow = np.exp(-push.tick_s / push.lag_s)[:, None]
    found = np.empty((ages, m, count))
    for age in range(ages):
        e = sentinel.F @ e
        if age == 0:
            e += push.state
        rise = fade * rise + (1 - fade) * (age == 0)
        below = follow * below + (1 - follow) * push.corner * rise
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


def build_bank(quiet: Quiet, sentinel: Sentinel, patterns: list[Pattern], tick_us: int) -> Bank:
    """All signatures over WINDOW_S (at least 60 ticks)."""
    push = build_push(quiet, sentinel, patterns, tick_us)
    ages = max(60, round(WINDOW_S / push.tick_s))
    pulse = pulse_responses(sentinel, push, ages)
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
    )
