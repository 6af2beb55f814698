"""What the controllers are doing, as far as can be told from outside."""

from __future__ import annotations

import numpy as np

from platewatch.monitor.inputs import Heard
from platewatch.monitor.loops import Loops, LoopStart, set_points_ahead
from platewatch.monitor.recipe import Recipe
from platewatch.types import Array


def errors_K(loops: Loops, heard: Heard) -> Array:
    """(nz,) set-point minus reading of each loop; nan where loop, reading or duty is not known."""
    error = heard.set_point - heard.degC[loops.sensor]
    return np.where(np.isfinite(heard.duty) & (loops.closed > 0), error, np.nan)


def integrals(loops: Loops, before: Array | None, heard: Heard, dt_us: int) -> Array:
    """(nz,) what the controllers' integrals have come to; nan where not known.

    before: what they were dt_us ago, None at the start
    """
    if before is None:
        before = np.full(heard.duty.size, np.nan)
    error = errors_K(loops, heard)
    live = np.isfinite(error)
    duty, error = np.where(live, heard.duty, 0.0), np.where(live, error, 0.0)
    return np.where(live, loops.follow(before, duty, error, dt_us / 1e6), np.nan)


def loop_start(
    loops: Loops, recipes: tuple[Recipe, ...], times_s: Array, heard: Heard, integral: Array | None
) -> LoopStart:
    """Where the forecast begins: duties, integrals, and set-points at its times."""
    ahead = set_points_ahead(heard.set_point, heard.set_point_slope, recipes, times_s)
    live = np.isfinite(errors_K(loops, heard))
    known = np.zeros(live.size) if integral is None else np.nan_to_num(integral)
    return LoopStart(
        duty=np.nan_to_num(heard.duty),
        integral=known,
        set_points=np.where(live[:, None], ahead, 0.0),
        live=live,
    )
