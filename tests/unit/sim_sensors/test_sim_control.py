"""The plant's own loops, programme and heater lag."""

from __future__ import annotations

import numpy as np
import pytest

from platewatch.thermal.plate import DutyLaw, Loop, LoopForm, Zone
from sim_sensors.control import (
    AntiWindup,
    Heaters,
    LoopState,
    Programme,
    Stage,
    power_share,
    regulate,
)

LOOP = Loop("T1", gain_per_K=0.08, integral_s=600.0)


def run(loop: Loop, errors: list[float], way: AntiWindup = AntiWindup.CLAMP) -> list[LoopState]:
    states, state = [], LoopState()
    for error in errors:
        state = regulate(loop, state, 100.0, 100.0 - error, 2.0, way)
        states.append(state)
    return states


def test_a_constant_error_raises_the_duty_by_gain_over_integral_time() -> None:
    """0.5 K for 600 s adds what the gain alone gives once more: 0.04."""
    states = run(LOOP, [0.5] * 301)
    assert states[0].duty == pytest.approx(0.04)
    assert states[-1].duty == pytest.approx(0.08, abs=1e-9)


@pytest.mark.parametrize("way", list(AntiWindup))
def test_a_long_error_never_winds_the_integral_past_full_output(way: AntiWindup) -> None:
    """After an hour at full output the duty leaves the limit within the span of the output."""
    states = run(LOOP, [40.0] * 1800 + [-14.0], way)
    assert states[-2].duty == 1.0
    assert states[-2].integral <= 1.0
    assert states[-1].duty < 1.0


def test_a_held_integral_waits_at_the_limit_and_a_clamped_one_runs_on() -> None:
    """The two ways differ exactly there."""
    assert run(LOOP, [40.0] * 100, AntiWindup.HOLD)[-1].integral == 0.0
    assert run(LOOP, [40.0] * 100, AntiWindup.CLAMP)[-1].integral == 1.0


def test_a_series_loop_acts_like_its_ideal_twin() -> None:
    """Ideal gain = series gain (1 + Td/Ti), Ti' = Ti + Td, Td' = Ti Td / (Ti + Td)."""
    series = Loop("T1", 0.08, 600.0, 60.0, LoopForm.SERIES)
    ideal = Loop("T1", 0.08 * 1.1, 660.0, 600.0 * 60.0 / 660.0)
    errors = [1.0, 0.9, 0.8, 0.85, 0.2]
    assert [s.duty for s in run(series, errors)] == pytest.approx(
        [s.duty for s in run(ideal, errors)]
    )


def test_a_missing_reading_takes_the_heat_away() -> None:
    """Burn-out reads high, so the output goes to its low limit."""
    state = regulate(LOOP, LoopState(0.3, 0.5, 99.0), 100.0, float("nan"), 2.0)
    assert (state.duty, state.integral) == (0.0, 0.3)


def test_the_set_point_climbs_as_the_recipe_says_then_waits_for_the_plate() -> None:
    """3 K/min from 22 to 120 degC takes 1960 s; the wait ends when all are in band."""
    stages = (
        Stage("ramp", to_degC=120.0, K_per_s=0.05),
        Stage("wait", within_K=2.0),
        Stage("soak"),
    )
    programme = Programme(stages, 22.0, 22.0)
    halfway = programme.at(980.0, [70.0])
    assert (halfway.set_point_degC, halfway.stage.do) == (pytest.approx(71.0), "ramp")
    top = halfway.at(1960.0, [117.0])
    assert (top.set_point_degC, top.stage.do) == (120.0, "wait")
    assert top.at(1962.0, [119.0, 117.0]).stage.do == "wait"
    assert top.at(1964.0, [119.0, 118.1]).stage.do == "soak"


def test_heat_arrives_behind_a_first_order_lag() -> None:
    """63.2 % after one lag; the mean over a time is the integral of the exponential."""
    heaters = Heaters(np.array([0.0]), np.array([1100.0]), np.array([30.0]))
    assert heaters.after(30.0)[0] == pytest.approx(1100.0 * (1 - np.exp(-1)))
    fine = np.mean([heaters.after(t)[0] for t in np.linspace(0.05, 59.95, 600)])
    assert heaters.mean_over(60.0)[0] == pytest.approx(fine, rel=1e-4)


def test_each_duty_law_draws_what_its_name_says() -> None:
    """Half the voltage is a quarter of the power; half a half-wave is half of it."""
    shares = {law: power_share(Zone("Z", (), 1.0, 0.0, 1.0, law, 3.0), 0.5) for law in DutyLaw}
    assert shares[DutyLaw.LINEAR] == shares[DutyLaw.BURST] == 0.5
    assert shares[DutyLaw.VOLTAGE_SQUARED] == 0.25
    assert shares[DutyLaw.PHASE_ANGLE] == pytest.approx(0.5)
    assert shares[DutyLaw.POWER] == 0.125
