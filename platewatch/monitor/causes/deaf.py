"""The observer without one thermocouple: what the others say by themselves.

A load on a thermocouple and that thermocouple loose look the same to it for minutes.
Run again without it, the others decide: with a loose one they fit the plate as it is,
with a load they do not.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from platewatch.monitor.causes.refine import Evidence, Fit, Ints
from platewatch.monitor.causes.sentinel import Sentinel
from platewatch.monitor.causes.signatures import Bank
from platewatch.monitor.causes.views import View
from platewatch.monitor.estimator import FieldState, Quiet
from platewatch.types import Array, Gaussian

LEAD_TICKS = 30  # it starts this long before the onset
SCALE_SD = 0.2  # of a fitted load's response, relative
SETTLE_TICKS = 5  # readings over which its error is averaged


@dataclass(frozen=True)
class Past:
    """One tick as the observer took it.

    mean (n,): before it;  push (n,): what drove it;  degC (m,): readings, nan where missing
    """

    mean: Array
    push: Array
    degC: Array


@dataclass(frozen=True)
class Deaf:
    """The observer run again without one thermocouple.

    mean (n,): now;  seen (ticks, m - 1): whitened innovations, newest last
    error_K: what the left-out one reads beyond what is expected there
    """

    sentinel: Sentinel
    mean: Array
    seen: Array
    error_K: float


def listen_without(
    quiet: Quiet,
    sentinel: Sentinel,
    past: Sequence[Past],
    heard: tuple[int, ...],
    sensor: int,
    age: int,
) -> Deaf:
    """Run the observer `sentinel`, which lacks `sensor`, from before the onset to now.

    heard: the sensors whose readings `past` holds, in order
    """
    start = max(0, len(past) - age - 1 - LEAD_TICKS)
    others = [heard.index(i) for i in sentinel.sensors]
    left_out = heard.index(sensor)
    row = quiet.H[sensor, : len(sentinel.F)]
    mean = past[start].mean
    seen, errors = [], []
    for tick in past[start:]:
        prior = sentinel.F @ mean + tick.push
        residual = tick.degC[others] - sentinel.H @ prior
        residual = np.where(np.isfinite(residual), residual, 0.0)
        mean = prior + sentinel.K @ residual
        seen.append(sentinel.whiten @ residual)
        errors.append(tick.degC[left_out] - row @ mean)
    known = np.array(errors[-SETTLE_TICKS:])
    known = known[np.isfinite(known)]
    return Deaf(sentinel, mean, np.array(seen), float(known.mean()) if known.size else 0.0)


def load_against_loose(deaf: Deaf, near: Bank, load: Fit, bank: Bank) -> float:
    """ln of how much better the fitted load explains the others than no load does.

    The load must be as strong as the left-out thermocouple asks for: its response times
    c ~ N(1, SCALE_SD^2), c integrated out.
    near: bank of the deaf observer;  bank: the one that the load was fitted in
    """
    columns, amplitude = _carried_over(near, load, bank)
    age = min(load.age, len(deaf.seen) - 1, near.ages - 1)
    evidence = Evidence(near, deaf.seen)
    weigh = evidence.weigh(age)
    response = np.einsum("acm,c->am", near.signature[: age + 1, columns], amplitude)
    turned = np.einsum("aij,aj->ai", weigh, response)
    seen = np.einsum("aij,aj->ai", weigh, evidence.window(age))
    b, J, precision = float((turned * seen).sum()), float((turned**2).sum()), SCALE_SD**-2
    total = J + precision
    fitted = (b + precision) ** 2 / (2 * total) - precision / 2
    return fitted + 0.5 * float(np.log(precision / total))


def _carried_over(near: Bank, load: Fit, bank: Bank) -> tuple[Ints, Array]:
    """The fitted load in the columns of another bank, as far as that has them."""
    known = {
        (near.patterns[p].x_m, near.patterns[p].y_m, near.patterns[p].size_m, shape): column
        for column, (p, shape) in enumerate(
            zip(near.column_pattern, near.column_shape, strict=True)
        )
    }
    columns, amplitude = [], []
    for c, amount in zip(load.columns, load.amplitude, strict=True):
        pattern = bank.patterns[bank.column_pattern[c]]
        key = (pattern.x_m, pattern.y_m, pattern.size_m, bank.column_shape[c])
        if key in known:
            columns.append(known[key])
            amplitude.append(float(amount))
    return np.array(columns, dtype=np.int64), np.array(amplitude)


def view_without(quiet: Quiet, view: View, deaf: Deaf, field: FieldState, sensor: int) -> View:
    """The plate with that thermocouple not believed at all."""
    k, n = quiet.blocks, len(deaf.sentinel.F)
    cov = np.zeros((k.size, k.size))
    cov[:n, :n] = deaf.sentinel.cov
    cov[k.theta, k.theta] = field.belief.cov[k.theta, k.theta]
    error = np.zeros_like(view.reading_error)
    error[sensor] = deaf.error_K
    return replace(
        view,
        belief=Gaussian(np.concatenate((deaf.mean, field.belief.mean[k.theta])), cov),
        missed=np.zeros_like(view.missed),
        reading_error=error,
    )
