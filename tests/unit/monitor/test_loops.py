"""What the controllers will ask for next."""

import numpy as np
import pytest
from scipy.integrate import quad

from platewatch.monitor.loops import (
    Controllers,
    LoopStart,
    build_loops,
    delivered_share,
    set_points_ahead,
)
from platewatch.monitor.recipe import Do, Recipe, Step
from platewatch.thermal.plate import DutyLaw, Loop, LoopForm, Rectangle, Sensor, Zone

SHAPES = (Rectangle(0.0, 0.0, 0.1, 0.1),)


def zone(law=DutyLaw.LINEAR, loop=None, **keys):
    return Zone("Z1", SHAPES, 400.0, 10.0, 1.0, duty_law=law, loop=loop, **keys)


class PlateOf:
    """Only what loops look at."""

    def __init__(self, *zones):
        self.zones = zones
        self.sensors = (Sensor("A", 0.05, 0.05), Sensor("B", 0.05, 0.05))


@pytest.mark.parametrize("duty", [0.0, 0.1, 0.25, 0.5, 0.8, 1.0])
def test_phase_angle_heat_is_the_mean_of_the_squared_voltage(duty):
    """A resistive load conducts over the last share `duty` of each half cycle."""
    late, _ = quad(lambda angle: np.sin(angle) ** 2, np.pi * (1 - duty), np.pi, epsabs=1e-13)
    share = late / (np.pi / 2)
    assert delivered_share(zone(DutyLaw.PHASE_ANGLE), duty) == pytest.approx(share, abs=1e-12)


@pytest.mark.parametrize(
    ("law", "share"),
    [(DutyLaw.LINEAR, 0.3), (DutyLaw.BURST, 0.3), (DutyLaw.VOLTAGE_SQUARED, 0.09)],
)
def test_a_duty_of_three_tenths_delivers_by_its_law(law, share):
    """Burst firing delivers its duty; half the voltage gives a quarter of the heat."""
    assert delivered_share(zone(law), 0.3) == pytest.approx(share)


def test_a_power_law_delivers_by_its_own_exponent():
    """duty_law power with n = 1.5."""
    by_power = zone(DutyLaw.POWER, duty_exponent=1.5)
    assert delivered_share(by_power, 0.25) == pytest.approx(0.125)


@pytest.mark.parametrize("law", list(DutyLaw))
def test_every_law_delivers_nothing_at_none_and_all_at_full(law):
    """No law loses or invents heat at its ends, and none falls between."""
    shares = delivered_share(zone(law), np.linspace(0, 1, 101))
    assert shares[0] == pytest.approx(0, abs=1e-12)
    assert shares[-1] == pytest.approx(1)
    assert (np.diff(shares) >= -1e-12).all()


def test_watts_are_called_for_by_zone():
    """(zones, draws) of duty to watts, each zone by its own law."""
    loops = build_loops(PlateOf(zone(), zone(DutyLaw.VOLTAGE_SQUARED)))
    duty = np.array([[0.0, 0.5, 1.0], [0.0, 0.5, 1.0]])
    assert loops.watts(duty) == pytest.approx(np.array([[0, 200, 400], [0, 100, 400]]))


def emulated(loop, set_point, readings, dt_s, start_duty=0.0):
    """The outputs of a loop over a series of readings, as shares of its 400 W."""
    loops = build_loops(PlateOf(zone(loop=loop)))
    integral = np.array([start_duty - loops.gain[0] * (set_point - readings[0])])
    start = LoopStart(np.array([start_duty]), integral, np.empty((1, 0)), np.array([True]))
    controllers = Controllers(loops, start, np.array([[readings[0]]]), dt_s)
    watts = [controllers.called_W(np.array([[r]]), np.array([set_point])) for r in readings]
    return np.array(watts).ravel() / 400.0


def test_a_loop_is_emulated_as_an_independent_discretisation_of_it():
    """PI in velocity form: du = K (e_k - e_k-1) + K dt / Ti e_k-1, while no limit is met."""
    loop = Loop("A", 0.02, 300.0)
    readings = 100 + 3 * np.sin(np.arange(60) / 7.0)
    duties = emulated(loop, 101.0, readings, 10.0, start_duty=0.5)
    error, u, expected = 101.0 - readings, 0.5, [0.5]
    for k in range(1, readings.size):
        u += 0.02 * (error[k] - error[k - 1]) + 0.02 * 10.0 / 300.0 * error[k - 1]
        expected.append(u)
    assert 0 < min(expected) < max(expected) < 1
    assert duties == pytest.approx(np.array(expected), abs=1e-12)


def test_a_derivative_acts_on_the_reading_not_on_the_set_point():
    """u = K e + I - K Td dy/dt: a rising reading takes heat away before the set-point."""
    quiet, leading = Loop("A", 0.02, 300.0), Loop("A", 0.02, 300.0, derivative_s=20.0)
    rising = 100 + 0.05 * 10 * np.arange(5)
    less = emulated(quiet, 110.0, rising, 10.0, 0.6) - emulated(leading, 110.0, rising, 10.0, 0.6)
    assert less[1:] == pytest.approx(np.full(4, 0.02 * 20.0 * 0.05))


def test_a_loop_at_its_limit_does_not_wind_up():
    """After an hour at full power the loop lets go at once, not after another hour."""
    loop = Loop("A", 0.08, 600.0)
    cold, hot = np.full(360, 80.0), np.full(30, 121.0)
    duties = emulated(loop, 120.0, np.concatenate((cold, hot)), 10.0, start_duty=1.0)
    assert (duties[:360] == 1.0).all()
    assert duties[361] == 0.0


def test_a_loop_at_its_limit_still_integrates_the_other_way():
    """Anti-windup stops the integral only in the direction of the limit: at full duty with
    the plate 1 K too hot it comes down, 0.08 * 1 K * 10 s / 600 s a step."""
    loops = build_loops(PlateOf(zone(loop=Loop("A", 0.08, 600.0))))
    start = LoopStart(np.ones(1), np.array([1.4]), np.empty((1, 0)), np.array([True]))
    controllers = Controllers(loops, start, np.array([[121.0]]), 10.0)
    warm, cold = np.array([[121.0]]), np.array([[119.0]])
    for _ in range(300):  # 1.4 - 0.08 - 300 * 0.08 / 60 is 0.92
        controllers.called_W(warm, np.array([120.0]))
    assert controllers.called_W(warm, np.array([120.0])) == pytest.approx(np.array([[368.0]]))
    for _ in range(300):
        controllers.called_W(cold, np.array([120.0]))
    # Unwound by one step at once: it was never taken beyond the limit.
    assert controllers.called_W(warm, np.array([120.0]))[0, 0] < 400.0


def test_a_loop_that_is_not_known_keeps_its_duty():
    """No set-point heard: the duty is held, whatever the reading does, within no limits."""
    loops = build_loops(PlateOf(zone(loop=Loop("A", 0.08, 600.0, low=0.2)), zone()))
    start = LoopStart(np.array([0.1, 0.7]), np.zeros(2), np.empty((2, 0)), np.array([False, True]))
    controllers = Controllers(loops, start, np.full((2, 3), 100.0), 10.0)
    for reading in (100.0, 150.0, 20.0):
        watts = controllers.called_W(np.full((2, 3), reading), np.zeros(2))
        assert watts == pytest.approx(np.array([[40.0] * 3, [280.0] * 3]))


def test_many_draws_are_controlled_each_by_its_own_reading():
    """Some at a limit and some not: every column as if alone."""
    loop, readings = Loop("A", 0.08, 600.0, 20.0), np.linspace(100.0, 130.0, 7)
    loops = build_loops(PlateOf(zone(loop=loop)))
    start = LoopStart(np.array([0.5]), np.array([0.4]), np.empty((1, 0)), np.array([True]))
    together = Controllers(loops, start, readings[None], 10.0)
    alone = [Controllers(loops, start, np.array([[r]]), 10.0) for r in readings]
    for step in range(40):
        moved = readings + 3 * np.sin(step / 5.0)
        watts = together.called_W(moved[None], np.array([118.0]))[0]
        each = [
            c.called_W(np.array([[r]]), np.array([118.0]))[0, 0]
            for c, r in zip(alone, moved, strict=True)
        ]
        assert watts == pytest.approx(np.array(each), abs=1e-9)


def test_a_series_loop_is_turned_into_the_ideal_form():
    """K (1 + 1 / Ti s)(1 + Td s) = K' (1 + 1 / Ti' s + Td' s), coefficient by coefficient."""
    K, Ti, Td = 0.05, 400.0, 60.0
    loops = build_loops(PlateOf(zone(loop=Loop("A", K, Ti, Td, form=LoopForm.SERIES))))
    gain, integral, derivative = loops.gain[0], loops.integral_s[0], loops.derivative_s[0]
    for s in (1e-4j, 1e-3j, 1e-2j, 0.1):
        series = K * (1 + 1 / (Ti * s)) * (1 + Td * s)
        assert gain * (1 + 1 / (integral * s) + derivative * s) == pytest.approx(series)


def test_a_loop_without_integral_only_answers_the_error():
    """Proportional only: the same error always gives the same duty."""
    duties = emulated(Loop("A", 0.02), 110.0, np.full(50, 100.0), 10.0, start_duty=0.2)
    assert duties == pytest.approx(np.full(50, 0.2))


def test_each_zone_follows_the_sensor_that_its_loop_names():
    """Loops name sensors; a zone without a loop is open."""
    loops = build_loops(PlateOf(zone(loop=Loop("B", 0.02)), zone(), zone(loop=Loop("A", 0.02))))
    assert loops.sensor.tolist() == [1, 0, 0]
    assert loops.closed.tolist() == [1, 0, 1]


RECIPE = Recipe(
    "cure",
    (
        Step(Do.RAMP, to_degC=80.0, rate_K_per_s=0.05),
        Step(Do.SOAK, duration_s=600),
        Step(Do.RAMP, to_degC=120.0, rate_K_per_s=0.05),
        Step(Do.COOL, to_degC=45.0),
    ),
)
TIMES = np.arange(1, 91) * 10.0


def test_a_ramp_that_the_recipe_knows_goes_on_to_its_end():
    """3 K/min from 70 degC: 80 degC after 200 s, and no further."""
    ahead = set_points_ahead(np.array([70.0]), np.array([0.05]), (RECIPE,), TIMES)[0]
    assert ahead[4] == pytest.approx(72.5)
    assert ahead[19] == pytest.approx(80.0)
    assert ahead[-1] == pytest.approx(80.0)


def test_a_second_ramp_of_the_same_rate_ends_at_its_own_goal():
    """From 100 degC upward only the ramp to 120 degC can be running."""
    ahead = set_points_ahead(np.array([100.0]), np.array([0.05]), (RECIPE,), TIMES)[0]
    assert ahead[-1] == pytest.approx(120.0)


@pytest.mark.parametrize("slope", [0.0, 0.03, -0.05, 0.08])
def test_a_slope_that_no_recipe_knows_is_not_carried_on(slope):
    """The set-point is held where it is: someone is changing it by hand."""
    ahead = set_points_ahead(np.array([70.0]), np.array([slope]), (RECIPE,), TIMES)[0]
    assert ahead == pytest.approx(np.full(TIMES.size, 70.0))


def test_a_set_point_never_heard_stays_unknown():
    """No set-point is invented."""
    ahead = set_points_ahead(np.array([np.nan]), np.array([0.0]), (RECIPE,), TIMES)
    assert np.isnan(ahead).all()


def followed(loop, set_point, readings, duties, dt_s=2.0):
    """The integral as told from outside, given what the controller really did."""
    loops = build_loops(PlateOf(zone(loop=loop)))
    integral = np.array([np.nan])
    for reading, duty in zip(readings, duties, strict=True):
        integral = loops.follow(integral, np.array([duty]), np.array([set_point - reading]), dt_s)
    return float(integral[0])


def test_the_integral_of_a_controller_at_its_limit_is_not_taken_from_its_error():
    """A cold load drives the duty to 1 while the error is 30 K: the integral stays where it
    was, 0.3, and the loop lets go only within 9 K of the set-point."""
    loop = Loop("A", 0.08, 600.0)
    readings = np.concatenate((np.full(30, 120.0), np.full(60, 90.0)))
    duties = np.concatenate((np.full(30, 0.3), np.ones(60)))
    assert followed(loop, 120.0, readings, duties) == pytest.approx(0.3)


def test_the_integral_of_a_controller_between_its_limits_follows_from_duty_and_error():
    """0.35 = 0.08 * 1 K + 0.27."""
    loop = Loop("A", 0.08, 600.0)
    assert followed(loop, 120.0, [119.0], [0.35]) == pytest.approx(0.27)


@pytest.mark.parametrize(
    ("reading", "duty", "integral"), [(60.0, 1.0, 0.0), (130.0, 0.0, 0.8), (115.0, 1.0, 0.6)]
)
def test_an_integral_never_seen_is_as_near_to_the_duty_as_the_limits_allow(reading, duty, integral):
    """At full duty, 60 K too cold: nothing beyond the limits was ever wound up.  At no duty,
    10 K too hot: at most what the error cancels.  At full duty, 5 K too cold: at least what
    the error leaves."""
    assert followed(Loop("A", 0.08, 600.0), 120.0, [reading], [duty]) == pytest.approx(integral)


def test_an_integral_that_cannot_explain_the_duty_is_corrected():
    """Full duty at an error of 2 K needs an integral of at least 0.84."""
    loop = Loop("A", 0.08, 600.0)
    found = followed(loop, 120.0, [119.0, 118.0], [0.35, 1.0])
    assert found == pytest.approx(0.84)
