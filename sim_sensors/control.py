"""The plant's own controls: set-point programme, PI loops, heater lag."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from enum import StrEnum

import numpy as np

from platewatch.thermal.plate import DutyLaw, Loop, LoopForm, Zone
from platewatch.types import Array


@dataclass(frozen=True)
class Stage:
    """One step of the programme.

    do: ramp (to_degC, K_per_s), wait (within_K, longest_s), soak (lasts_s)
    """

    do: str
    to_degC: float = 0.0
    K_per_s: float = 0.0
    within_K: float = 0.0
    longest_s: float = np.inf
    lasts_s: float = np.inf


CURE = (Stage("ramp", to_degC=120.0, K_per_s=0.05), Stage("soak"))


@dataclass(frozen=True)
class Programme:
    """Where the set-point is: stage `number`, entered at `since_s` from `from_degC`."""

    stages: tuple[Stage, ...]
    from_degC: float
    set_point_degC: float
    number: int = 0
    since_s: float = 0.0

    @property
    def stage(self) -> Stage:
        return self.stages[self.number]

    def at(self, at_s: float, readings_degC: Sequence[float]) -> Programme:
        """The programme at a later time, given what the loop sensors read."""
        stage, after = self.stage, at_s - self.since_s
        set_point = self.set_point_degC
        match stage.do:
            case "ramp":
                way = stage.to_degC - self.from_degC
                moved = min(stage.K_per_s * after, abs(way))
                set_point = self.from_degC + float(np.sign(way)) * moved
                done = moved >= abs(way)
            case "wait":
                off = np.abs(np.asarray(readings_degC) - set_point)
                done = bool((off <= stage.within_K).all()) or after >= stage.longest_s
            case _:
                done = after >= stage.lasts_s
        now = replace(self, set_point_degC=set_point)
        if done and self.number + 1 < len(self.stages):
            return replace(now, number=self.number + 1, since_s=at_s, from_degC=set_point)
        return now


@dataclass(frozen=True)
class LoopState:
    integral: float = 0.0
    duty: float = 0.0
    reading_degC: float | None = None


class AntiWindup(StrEnum):
    """What keeps the integral in bounds while the output is at a limit.

    CLAMP: it runs on, but only between the output limits
    HOLD: it waits while the error would drive the output further out
    Both are common; Astrom & Hagglund, PID Controllers (1995), sec. 3.5, from memory.
    """

    CLAMP = "clamp"
    HOLD = "hold"


def regulate(
    loop: Loop,
    state: LoopState,
    set_point_degC: float,
    reading_degC: float,
    period_s: float,
    anti_windup: AntiWindup = AntiWindup.HOLD,
) -> LoopState:
    """One scan of a PI or PID loop; the derivative acts on the reading.

    A missing reading switches the output to its low limit, as burn-out upscale does.
    """
    if np.isnan(reading_degC):
        return replace(state, duty=loop.low, reading_degC=None)
    gain, integral_s, derivative_s = _ideal(loop)
    error = set_point_degC - reading_degC
    before = state.reading_degC if state.reading_degC is not None else reading_degC
    slope = (reading_degC - before) / period_s
    added = gain * error * period_s / integral_s if integral_s else 0.0
    wanted = gain * error + state.integral - gain * derivative_s * slope
    further = (wanted >= loop.high and error > 0) or (wanted <= loop.low and error < 0)
    integral = state.integral + added
    match anti_windup:
        case AntiWindup.CLAMP:
            integral = float(np.clip(integral, loop.low, loop.high))
        case AntiWindup.HOLD if further:
            integral = state.integral
    duty = float(np.clip(wanted, loop.low, loop.high))
    return LoopState(integral, duty, reading_degC)


def _ideal(loop: Loop) -> tuple[float, float | None, float]:
    """Gain, integral and derivative time of the ideal form."""
    if loop.form is LoopForm.IDEAL or not loop.integral_s:
        return loop.gain_per_K, loop.integral_s, loop.derivative_s
    ratio = 1.0 + loop.derivative_s / loop.integral_s
    return loop.gain_per_K * ratio, loop.integral_s * ratio, loop.derivative_s / ratio


def power_share(zone: Zone, duty: float) -> float:
    """Part of the zone's watts that a duty (0..1) draws in the steady state."""
    match zone.duty_law:
        case DutyLaw.LINEAR | DutyLaw.BURST:
            return duty
        case DutyLaw.VOLTAGE_SQUARED:
            return duty**2
        case DutyLaw.PHASE_ANGLE:
            angle = np.pi * (1.0 - duty)
            return float(1.0 - angle / np.pi + np.sin(2.0 * angle) / (2.0 * np.pi))
        case DutyLaw.POWER:
            return float(duty**zone.duty_exponent)


@dataclass(frozen=True)
class Heaters:
    """Heat that arrives in the plate, W per zone, each behind a first-order lag.

    flowing: now (z,);  target: what the duty asks for (z,);  lag_s (z,)
    """

    flowing: Array
    target: Array
    lag_s: Array

    def after(self, seconds: float) -> Array:
        """Watts (z,) some time later with the target held."""
        left = np.exp(-seconds / np.maximum(self.lag_s, 1e-9))
        return self.target + (self.flowing - self.target) * left

    def mean_over(self, seconds: float) -> Array:
        """Mean watts (z,) from now on with the target held."""
        lag = np.maximum(self.lag_s, 1e-9)
        return self.target + (self.flowing - self.target) * -np.expm1(-seconds / lag) * (
            lag / seconds
        )
