"""An L-stable step for stiff heat equations, with step control.

C dT/dt = f(t, T) by the four-stage Rosenbrock method of order 3 with an embedded
second-order result, stiffly accurate (Sandu, Verwer, Blom et al. 1997, "Rodas3").
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.sparse import csc_array, csr_array, diags_array
from scipy.sparse.linalg import splu

from platewatch.errors import PlateError
from platewatch.types import Array

GAMMA = 0.5
STAGE_TIME = (0.0, 0.0, 1.0, 1.0)
TIME_SLOPE = (0.5, 1.5, 0.0, 0.0)
FROM_STAGE = ((), (0.0,), (2.0, 0.0), (2.0, 0.0, 1.0))
COUPLING = ((), (4.0,), (1.0, -1.0), (1.0, -1.0, -8.0 / 3.0))
RESULT = (2.0, 0.0, 1.0, 1.0)
MOST_STEPS = 20_000


@dataclass(frozen=True, eq=False)
class Factored:
    """C / (gamma dt) + K, factored."""

    dt: float
    solve: Callable[[Array], Array]


def factor(capacity: Array, K: csr_array, dt: float) -> Factored:
    return Factored(dt, lu(K + diags_array(capacity / (GAMMA * dt))))


def lu(K: csr_array) -> Callable[[Array], Array]:
    """Factor a matrix of symmetric pattern with a strong diagonal; solves (n,) or (n, k)."""
    factors = splu(
        csc_array(K),
        permc_spec="MMD_AT_PLUS_A",
        diag_pivot_thresh=0.01,
        options={"SymmetricMode": True},
    )
    solve: Callable[[Array], Array] = factors.solve
    return solve


def one_step(
    capacity: Array,
    rate: Callable[[float, Array], Array],
    factored: Factored,
    t: float,
    T: Array,
) -> tuple[Array, Array]:
    """T after one step, and the estimate of its error (n,) K."""
    dt = factored.dt
    now = rate(t, T)
    nudge = 1e-6 * dt
    by_time = (rate(t + nudge, T) - now) / nudge
    stages: list[Array] = []
    f = now
    for start, weights, couple, slope in zip(
        STAGE_TIME, FROM_STAGE, COUPLING, TIME_SLOPE, strict=True
    ):
        if any(weights):
            moved = T + sum(w * K for w, K in zip(weights, stages, strict=True) if w)
            f = rate(t + start * dt, moved)
        q = f + slope * dt * by_time
        for c, K in zip(couple, stages, strict=True):
            q = q + (c / dt) * capacity * K
        stages.append(factored.solve(q))
    after = T + sum(m * K for m, K in zip(RESULT, stages, strict=True) if m)
    return after, stages[-1]


def integrate(
    capacity: Array,
    rate: Callable[[float, Array], Array],
    stiffness: Callable[[float, Array], csr_array],
    initial: Array,
    times_s: Array,
    tolerance_K: float = 1e-3,
    linear: bool = False,
    watch: Callable[[float, Array, float, Array], None] | None = None,
) -> Array:
    """T (t, n) at times_s (t,), rising, from `initial` (n,) at 0 s.

    capacity (n,) J/K;  rate(t, T) (n,) W;  stiffness(t, T): -d rate / dT, W/K
    linear: the stiffness never changes, so a factorisation lives as long as its step size
    tolerance_K: error allowed per step at the worst cell
    watch: is told every accepted step, from (t, T) to (t, T)
    Raises PlateError when the steps become absurdly many.
    """
    T, t = np.array(initial, dtype=np.float64), 0.0
    times = np.asarray(times_s, dtype=np.float64)
    out = np.empty((times.size, T.size))
    dt = _first_step(capacity, rate(0.0, T), tolerance_K, float(times[-1]))
    factored: Factored | None = None
    steps = 0
    for row, goal in enumerate(times.tolist()):
        while goal - t > 1e-9 * max(goal, 1.0):
            count = np.ceil((goal - t) / dt * (1 - 1e-9))
            use = (goal - t) / count if count < 4 else dt
            if factored is None or not linear or abs(factored.dt / use - 1) > 1e-9:
                factored = factor(capacity, stiffness(t, T), use)
            after, error = one_step(capacity, rate, factored, t, T)
            worst = float(np.abs(error).max()) / tolerance_K
            steps += 1
            if steps > MOST_STEPS or not np.isfinite(worst):
                raise PlateError(
                    f"the calculation does not settle at {t:.3g} s; look for an extreme power, "
                    "loss or property table in the description"
                )
            growth = 0.9 / max(worst, 1e-6) ** (1 / 3)
            if worst <= 1.0:
                if watch is not None:
                    watch(t, T, t + use, after)
                t, T = t + use, after
                if linear and 1.0 <= growth < 1.8:
                    growth = 1.0  # a kept factorisation is worth more than a longer step
            dt = use * float(np.clip(growth, 0.2, 4.0))
        out[row] = T
    return out


def _first_step(capacity: Array, heat: Array, tolerance_K: float, end_s: float) -> float:
    """A step in which the quickest cell moves by some tolerances."""
    fastest = float(np.abs(heat / capacity).max())
    return min(end_s, max(1e-6 * end_s, 30 * tolerance_K / max(fastest, 1e-12)))
