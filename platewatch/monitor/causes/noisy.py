"""A reading that jumps about far more than its noise: bad ground, loose terminal, damp.

Second differences of successive readings know no ramp; one jump disturbs only three.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from platewatch.monitor.estimator import Quiet
from platewatch.types import Array

FAR_SD = 4.0  # standard deviations of a second difference, beyond which it is far off
OVER_READINGS = 30.0  # the share of far ones is averaged over about so many
OFTEN = 0.4  # share at which the reading is noisy; ten times the noise gives 0.69
SELDOM = 0.15  # share at which it is quiet again


@dataclass(frozen=True)
class Jumps:
    """By thermocouple (ns,).  last, before: its readings;  share: of far differences"""

    last: Array
    before: Array
    share: Array
    noisy: frozenset[int] = frozenset()


def no_jumps(quiet: Quiet) -> Jumps:
    """Before the first reading."""
    unknown = np.full(len(quiet.plate.sensors), np.nan)
    return Jumps(unknown, unknown, np.zeros(unknown.size))


def follow(quiet: Quiet, jumps: Jumps, degC: Array) -> Jumps:
    """One tick.  degC (ns,): readings, nan where there was none."""
    second = np.abs(degC - 2 * jumps.last + jumps.before)
    far = second > FAR_SD * np.sqrt(6 * quiet.noise_var)
    known = np.isfinite(second)
    share = np.where(known, jumps.share + (far - jumps.share) / OVER_READINGS, jumps.share)
    heard = np.isfinite(degC)
    bar = np.array([SELDOM if i in jumps.noisy else OFTEN for i in range(share.size)])
    return Jumps(
        np.where(heard, degC, jumps.last),
        np.where(heard, jumps.last, jumps.before),
        share,
        frozenset(np.flatnonzero(share >= bar).tolist()),
    )
