"""A reading that stands still: the no-change test.

A live thermocouple flickers by its noise and moves with the plate.  How likely it is
to repeat its last value is known from its noise and quantum, and learned from itself;
a run of equal readings that this makes unlikelier than MOST_RARE, or during which the
plate under it must have moved by many steps of its last digit, is no live reading.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from platewatch.monitor.estimator import Quiet
from platewatch.types import Array

MOST_RARE = -float(np.log(1e-10))  # of one run to happen by chance
LEARNED_OVER = 300.0  # readings
LEAST_RUN_S = 20.0
LEAST_READINGS = 8
MOVED_STEPS = 6.0  # expected movement, in steps of the last digit and noise together
MOST_REPEATING = 0.995  # of a reading that hardly ever changes
SAME_SHARE = 1e-3  # of a quantum: readings this close are equal


@dataclass(frozen=True)
class Still:
    """By thermocouple (ns,).

    value: last reading, nan before the first;  since_us: of the first equal one
    run: equal readings since then;  repeats: learned share of readings equal to the last
    expected: what the field said there when the run began
    """

    value: Array
    since_us: Array
    run: Array
    repeats: Array
    expected: Array


def nothing_still(quiet: Quiet) -> Still:
    """Before the first reading."""
    ns = len(quiet.plate.sensors)
    zero = np.zeros(ns)
    return Still(np.full(ns, np.nan), zero, zero, flicker(quiet), np.full(ns, np.nan))


def flicker(quiet: Quiet) -> Array:
    """(ns,) probability that a healthy reading on a still plate repeats, from its description:
    two values of the same noise fall into the same step of the last digit."""
    found = []
    for sensor in quiet.plate.sensors:
        if sensor.quantum_K <= 0 and sensor.noise_K > 0:
            found.append(0.0)
            continue
        if sensor.noise_K <= 0:
            found.append(1.0)
            continue
        steps = np.arange(-60, 61) + 0.5
        edges = ndtr(steps * sensor.quantum_K / sensor.noise_K)
        found.append(float(np.square(np.diff(edges)).sum()))
    return np.asarray(np.clip(np.array(found), 0.0, MOST_REPEATING))


def listen(quiet: Quiet, still: Still, at_us: int, degC: Array, expected: Array) -> Still:
    """One tick.  degC (ns,): readings, nan where there was none;  expected (ns,) degC."""
    quantum = np.array([max(s.quantum_K, 1e-6) for s in quiet.plate.sensors])
    heard = np.isfinite(degC)
    known = heard & np.isfinite(still.value)
    equal = known & (np.abs(degC - np.nan_to_num(still.value)) <= SAME_SHARE * quantum)
    changed = heard & ~equal
    # A run is learned from when it has ended: one that never ends is what is looked for.
    keep = (1 - 1 / LEARNED_OVER) ** np.where(changed & known, still.run, 0.0)
    learned = (1 - (1 - still.repeats) * keep) * (1 - 1 / LEARNED_OVER)
    repeats = np.where(changed & known, learned, still.repeats)
    return Still(
        np.where(heard, degC, still.value),
        np.where(changed, at_us, still.since_us),
        np.where(changed, 0.0, still.run + equal),
        np.clip(repeats, 0.0, MOST_REPEATING),
        np.where(changed | ~np.isfinite(still.expected), expected, still.expected),
    )


def frozen(quiet: Quiet, still: Still, at_us: int, expected: Array) -> frozenset[int]:
    """Thermocouples whose reading stands still against all expectation."""
    step = np.array([np.hypot(s.quantum_K, s.noise_K) for s in quiet.plate.sensors])
    described = flicker(quiet)
    repeats = np.clip(np.maximum(described, still.repeats), 1e-6, MOST_REPEATING)
    rare = still.run * -np.log(repeats) >= MOST_RARE
    moved = np.abs(expected - still.expected) >= MOVED_STEPS * np.maximum(step, 0.05)
    lasted = (at_us - still.since_us) / 1e6 >= LEAST_RUN_S
    counted = still.run >= LEAST_READINGS
    return frozenset(np.flatnonzero(lasted & counted & (rare | (moved & (still.run > 0)))).tolist())
