"""A reading that jumps where the plate cannot.

A junction follows the plate with its lag.  Even where the plate under it suddenly warms
or cools at FASTEST_K_S, a reading's slope changes by no more than
FASTEST dt (1 - exp(-dt / lag)) from one tick to the next, and by half as much again
against its mean over two.  A bend beyond that, after which the reading stays at its new
level, is the instrument's doing: no heat and no load explains it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from platewatch.monitor.estimator import Quiet
from platewatch.types import Array

FASTEST_K_S = 2.0  # steel of 20 mm under a cold block with 600 W/m2K cools by 0.8 K/s
NOISE_SD = 6.0  # of a bend
STAYS_TICKS = 3  # readings that must confirm the new level
BACK_SHARE = 0.5  # of the jump: what comes back by so much was a spike


@dataclass(frozen=True)
class Levels:
    """By thermocouple (ns,).

    recent (3, ns): last readings, oldest first, nan where one is missing
    foot: level before a jump that is being confirmed, nan where there is none
    height: of that jump;  held: readings since then at the new level
    """

    recent: Array
    foot: Array
    height: Array
    held: Array
    jumped: frozenset[int] = frozenset()


def no_levels(quiet: Quiet) -> Levels:
    """Before the first reading."""
    ns = len(quiet.plate.sensors)
    unknown = np.full(ns, np.nan)
    return Levels(np.full((3, ns), np.nan), unknown, np.zeros(ns), np.zeros(ns))


def largest_bend_K(quiet: Quiet, dt_s: float) -> Array:
    """(ns,) beyond which a change of slope within one tick is not the plate's."""
    lag_s = quiet.steps.system.sensor_lag_s
    physical = 1.5 * FASTEST_K_S * dt_s * -np.expm1(-dt_s / lag_s)
    return np.asarray(np.maximum(physical, NOISE_SD * np.sqrt(2.5 * quiet.noise_var)))


def compare(quiet: Quiet, levels: Levels, degC: Array, dt_s: float) -> Levels:
    """One tick.  degC (ns,): readings, nan where there was none."""
    before = levels.recent
    slope = (before[2] - before[0]) / 2
    bend = degC - before[2] - slope
    bar = largest_bend_K(quiet, dt_s)
    waits = np.isfinite(levels.foot)
    starts = ~waits & np.isfinite(bend) & (np.abs(bend) > bar)
    foot = np.where(starts, before[2], levels.foot)
    height = np.where(starts, bend, levels.height)
    risen = (degC - foot) * np.sign(height)
    stays = waits & np.isfinite(degC) & (risen >= BACK_SHARE * np.abs(height))
    gone = waits & np.isfinite(degC) & ~stays
    held = np.where(starts, 1.0, np.where(stays, levels.held + 1, levels.held))
    done = held >= STAYS_TICKS
    over = gone | done
    return Levels(
        np.vstack((before[1:], degC)),
        np.where(over, np.nan, foot),
        np.where(over, 0.0, height),
        np.where(over, 0.0, held),
        frozenset(np.flatnonzero(done).tolist()),
    )
