"""Faults that a reading shows by itself: it stands still, jumps, or is a mirror image.

No field and no other cause is needed to tell them, so they are watched from the first
reading on, also before the bank listens.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from platewatch.monitor.causes.catalogue import Cause
from platewatch.monitor.causes.frozen import Still, frozen, listen, nothing_still
from platewatch.monitor.causes.jumped import Levels, compare, no_levels
from platewatch.monitor.causes.mirrored import Mirrors, look, mirrored, no_mirrors
from platewatch.monitor.causes.noisy import Jumps, follow, no_jumps
from platewatch.monitor.causes.settled import Settled
from platewatch.monitor.causes.views import View
from platewatch.monitor.estimator import FieldState, Observed, Quiet
from platewatch.types import Array

PROBABILITY = 0.99  # of a finding that needs no model


@dataclass(frozen=True)
class Plain:
    """still, mirrors, jumps, levels: what each test carries along;  found: cause by thermocouple"""

    still: Still
    mirrors: Mirrors
    jumps: Jumps
    levels: Levels
    found: Mapping[int, Cause]


def begin(quiet: Quiet) -> Plain:
    """Before the first reading."""
    return Plain(nothing_still(quiet), no_mirrors(quiet), no_jumps(quiet), no_levels(quiet), {})


def watch(
    quiet: Quiet,
    plain: Plain,
    at_us: int,
    dt_us: int,
    seen: Observed,
    field: FieldState | None,
    junctions: Mapping[str, float],
    off: Sequence[str] = (),
) -> Plain:
    """One tick.  seen: all readings;  field: as known before it;  off: causes not looked for."""
    ns = len(quiet.plate.sensors)
    degC = np.full(ns, np.nan)
    degC[list(seen.sensors)] = seen.degC
    expected = np.full(ns, np.nan) if field is None else _expected(quiet, field)
    still = listen(quiet, plain.still, at_us, degC, expected)
    mirrors = look(
        quiet, plain.mirrors, at_us, degC, seen.around, junctions, frozenset(plain.found)
    )
    jumps = follow(quiet, plain.jumps, degC)
    levels = compare(quiet, plain.levels, degC, dt_us / 1e6)
    found: dict[int, Cause] = {}
    for cause, numbers in (
        (Cause.SENSOR_STEP, levels.jumped),
        (Cause.SENSOR_NOISY, jumps.noisy),
        (Cause.SENSOR_STUCK, frozen(quiet, still, at_us, expected)),
        (Cause.SENSOR_REVERSED, mirrored(mirrors, at_us)),
    ):
        if cause.value not in off:
            found |= dict.fromkeys(sorted(numbers), cause)
    return Plain(still, mirrors, jumps, levels, found)


def _expected(quiet: Quiet, field: FieldState) -> Array:
    """(ns,) what the field gives at the junctions."""
    k = quiet.blocks
    return np.asarray(quiet.steps.system.sensors @ field.belief.mean[k.a])


def verdict(quiet: Quiet, field: FieldState, cause: Cause, sensor: int, since_us: int) -> Settled:
    """A plain fault as a settled cause: its thermocouple is left out from now on."""
    place = quiet.plate.sensors[sensor]
    error = np.zeros(len(quiet.plate.sensors))
    view = View(
        parts=((cause, place.name),),
        probability=PROBABILITY,
        belief=field.belief,
        missed=np.zeros(quiet.grid.n),
        heat_ahead=np.zeros((0, quiet.blocks.modes)),
        reading_error=error,
        watts=0.0,
        onset_us=since_us,
        x_m=place.x_m,
        y_m=place.y_m,
        lasting=np.zeros(quiet.blocks.modes),
        lasting_share=0.0,
    )
    return Settled(view, field.at_us)


__all__ = ["Plain", "begin", "verdict", "watch"]
