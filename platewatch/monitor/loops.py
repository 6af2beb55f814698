"""Control loops as the forecast needs them: what the controllers will ask for next."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from platewatch.monitor.recipe import Do, Recipe
from platewatch.thermal.plate import DutyLaw, Loop, LoopForm, Plate, Zone
from platewatch.types import Array

BoolArray = NDArray[np.bool_]
AT_LIMIT = 1e-3  # a duty this near to its limit is at it
RAMP_MATCH = 0.15  # a set-point slope within 15 % of a recipe's rate is that ramp


def delivered_share(zone: Zone, duty: Array | float) -> Array:
    """Share of the zone's watts at a duty of 0..1, by its duty law.

    phase-angle: resistive load, conduction over the share `duty` of each half
    cycle: d - sin(2 pi d) / (2 pi) (closed form of the mean of sin squared).
    """
    d = np.asarray(duty, dtype=np.float64)
    match zone.duty_law:
        case DutyLaw.LINEAR | DutyLaw.BURST:
            return d
        case DutyLaw.PHASE_ANGLE:
            return np.asarray(d - np.sin(2 * np.pi * d) / (2 * np.pi))
        case DutyLaw.VOLTAGE_SQUARED:
            return np.asarray(d**2)
        case DutyLaw.POWER:
            return np.asarray(d**zone.duty_exponent)


@dataclass(frozen=True)
class Loops:
    """The plate's loops as arrays over its zones; `closed` marks the zones that have one.

    gain duty/K, integral_s (inf: none), derivative_s, low, high: (nz,)
    sensor (nz,): index of the controlling thermocouple, 0 where there is none
    full_W (nz, 1): watts at full duty;  linear: every zone delivers its duty as it is
    """

    zones: tuple[Zone, ...]
    closed: Array
    gain: Array
    integral_s: Array
    derivative_s: Array
    low: Array
    high: Array
    sensor: NDArray[np.int64]
    full_W: Array
    linear: bool

    def watts(self, duty: Array) -> Array:
        """(nz, N) duty to (nz, N) watts called for."""
        if self.linear:
            return duty * self.full_W
        return np.array(
            [z.watts * delivered_share(z, d) for z, d in zip(self.zones, duty, strict=True)]
        )

    def follow(self, integral: Array, duty: Array, error_K: Array, dt_s: float) -> Array:
        """The integral part (nz,) with which the controllers come to ask for `duty`.

        integral: what it was dt_s ago, nan where not known;  error_K: set-point - reading.
        Between the limits it follows from duty and error.  At a limit duty tells nothing
        more: the integral goes on from where it was, or from within the limits, as far as
        it explains the duty; taken from duty and error it would be wound up.
        """
        direct = duty - self.gain * error_K
        known = np.where(np.isnan(integral), np.clip(direct, self.low, self.high), integral)
        wanted = self.gain * error_K + known
        stuck = _beyond(wanted, error_K, self.low, self.high)
        moved = known + np.where(stuck, 0.0, self.gain * error_K / self.integral_s) * dt_s
        at_high, at_low = duty >= self.high - AT_LIMIT, duty <= self.low + AT_LIMIT
        held = np.where(at_high, np.maximum(moved, direct), np.minimum(moved, direct))
        return np.where(at_high | at_low, held, direct)


def _beyond(wanted: Array, error: Array, low: Array, high: Array) -> BoolArray:
    """Where integrating would push an output further past its limit (anti-windup)."""
    return np.asarray(((wanted >= high) & (error > 0)) | ((wanted <= low) & (error < 0)))


def _ideal(loop: Loop) -> tuple[float, float, float]:
    """Gain, integral and derivative time in the ideal form (series converted)."""
    ti = loop.integral_s or np.inf
    if loop.form is LoopForm.IDEAL or loop.derivative_s == 0 or not np.isfinite(ti):
        return loop.gain_per_K, ti, loop.derivative_s
    both = 1 + loop.derivative_s / ti
    return loop.gain_per_K * both, ti * both, loop.derivative_s / both


def build_loops(plate: Plate) -> Loops:
    """The loops of a plate, one column a zone."""
    names = [s.name for s in plate.sensors]
    rows = []
    for zone in plate.zones:
        loop = zone.loop
        if loop is None:
            rows.append((0.0, 0.0, np.inf, 0.0, 0.0, 1.0, 0.0))
        else:
            gain, ti, td = _ideal(loop)
            rows.append((1.0, gain, ti, td, loop.low, loop.high, float(names.index(loop.sensor))))
    table = np.array(rows).reshape(len(plate.zones), 7).T
    full_W = np.array([[zone.watts] for zone in plate.zones]).reshape(-1, 1)
    linear = all(zone.duty_law in (DutyLaw.LINEAR, DutyLaw.BURST) for zone in plate.zones)
    return Loops(
        plate.zones,
        closed=table[0],
        gain=table[1],
        integral_s=table[2],
        derivative_s=table[3],
        low=table[4],
        high=table[5],
        sensor=table[6].astype(np.int64),
        full_W=full_W,
        linear=linear,
    )


@dataclass(frozen=True)
class LoopStart:
    """What the controllers are doing now.

    duty (nz,): 0..1 as logged;  integral (nz,): part of it that the error does not explain;
    set_points (nz, steps): along the horizon;  live (nz,): loop and both are known
    """

    duty: Array
    integral: Array
    set_points: Array
    live: BoolArray


class Controllers:
    """All controllers over many draws at once, step by step; owned by one forecast.

    Zones whose loop is open, or not known well enough, keep their duty.
    """

    def __init__(self, loops: Loops, start: LoopStart, reading: Array, step_s: float) -> None:
        shape = reading.shape
        live = start.live & (loops.closed > 0)

        def wide(values: Array) -> Array:
            """(nz, N): arithmetic on equal shapes is far quicker than on broadcast ones."""
            return np.repeat(values[:, None], shape[1], axis=1)

        self._loops = loops
        self._gain = wide(np.where(live, loops.gain, 0.0))
        self._rate = self._gain * wide(step_s / loops.integral_s)
        self._slope = -self._gain * wide(loops.derivative_s / step_s)
        self._has_slope = bool(self._slope.any())
        self._low = wide(np.where(live, loops.low, -np.inf))
        self._high = wide(np.where(live, loops.high, np.inf))
        self._least_high, self._most_low = float(self._high.min()), float(self._low.max())
        self._integral = wide(np.where(live, start.integral, start.duty))
        self._before = reading.copy()

    def called_W(self, reading: Array, set_point: Array) -> Array:
        """Watts called for (nz, N) over the next step."""
        error = set_point[:, None] - reading
        wanted = self._gain * error
        wanted += self._integral
        if self._has_slope:
            wanted += self._slope * (reading - self._before)
            self._before[:] = reading
        if wanted.max() < self._least_high and wanted.min() > self._most_low:
            self._integral += self._rate * error
            return self._loops.watts(wanted)
        stuck = _beyond(wanted, error, self._low, self._high)
        self._integral += self._rate * np.where(stuck, 0.0, error)
        return self._loops.watts(np.minimum(np.maximum(wanted, self._low), self._high))


def set_points_ahead(
    now_degC: Array, slope_K_s: Array, recipes: tuple[Recipe, ...], times_s: Array
) -> Array:
    """Set-points (nz, times): a ramp that a recipe knows goes on to its end, else held.

    now_degC (nz,): nan where no set-point is known
    """
    ahead = np.repeat(now_degC[:, None], times_s.size, axis=1)
    for zone, (now, slope) in enumerate(zip(now_degC, slope_K_s, strict=True)):
        goal = _ramp_goal(float(now), float(slope), recipes)
        if goal is not None:
            moved = now + slope * times_s
            ahead[zone] = np.minimum(moved, goal) if slope > 0 else np.maximum(moved, goal)
    return ahead


def _ramp_goal(now: float, slope: float, recipes: tuple[Recipe, ...]) -> float | None:
    """Where the ramp that is running now will end, if a recipe knows it."""
    if not np.isfinite(now) or abs(slope) < 1e-6:
        return None
    goals = [
        step.to_degC
        for recipe in recipes
        for step in recipe.steps
        if step.do is Do.RAMP
        and step.to_degC is not None
        and step.rate_K_per_s
        and abs(abs(slope) - step.rate_K_per_s) <= RAMP_MATCH * step.rate_K_per_s
        and (step.to_degC - now) * slope > 0
    ]
    return min(goals, key=lambda goal: abs(goal - now)) if goals else None
