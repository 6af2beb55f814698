"""The quiet filter of one plate."""

from dataclasses import replace

import numpy as np
import pytest
from watched_plate import TICK_US, observed, plate, quiet

from platewatch.monitor.estimator import (
    POWER,
    advance,
    first_state,
    forecast_step,
    nearest_zone,
    restarted,
)
from platewatch.monitor.shots import power_rows
from platewatch.monitor.tolerance import bias_sd_K
from platewatch.thermal.conduction import conduction_matrix, loss_watts
from platewatch.thermal.grid import build_grid
from platewatch.thermal.reduction import project
from platewatch.types import Gaussian

MINUTE_US = 60_000_000


def field(q, state):
    return q.reduced.V @ state.belief.mean[q.blocks.a]


def field_sd(q, state):
    a = q.blocks.a
    return np.sqrt(np.einsum("ij,jk,ik->i", q.reduced.V, state.belief.cov[a, a], q.reduced.V))


def test_the_first_field_is_as_warm_as_its_thermocouples():
    """The start is what is read, not what the recipe hopes for."""
    q = quiet()
    state = first_state(q, 0, observed(q, [87.0, 87.1, 86.9]))
    assert field(q, state) == pytest.approx(np.full(q.grid.x.size, 87.0), abs=1.0)


def test_the_first_field_is_less_certain_away_from_thermocouples():
    """The corner is known worse than the place of a thermocouple."""
    q = quiet()
    state = first_state(q, 0, observed(q, [120.0, 120.0, 120.0]))
    sd = field_sd(q, state)
    near = np.hypot(q.grid.x - 0.1, q.grid.y - 0.1).argmin()
    corner = np.hypot(q.grid.x, q.grid.y - 0.2).argmin()
    assert sd[corner] > 1.2 * sd[near]


def test_one_thermocouple_alone_starts_the_picture():
    """The others may still be silent."""
    q = quiet()
    state = first_state(q, 0, observed(q, [np.nan, 60.0, np.nan]))
    assert field(q, state).mean() == pytest.approx(60.0, abs=1.0)


def test_a_plate_at_room_temperature_stays_there():
    """Off, and everything at 22 degC: after an hour still 22 degC, although the losses are
    linearised at 120 degC."""
    q = quiet()
    state = first_state(q, 0, observed(q, [22.0, 22.0, 22.0]))
    for _ in range(1800):
        state, _ = advance(q, state, TICK_US, observed(q, [22.0, 22.0, 22.0]))
    assert field(q, state) == pytest.approx(np.full(q.grid.x.size, 22.0), abs=1e-3)
    assert state.belief.mean[q.blocks.d] == pytest.approx([0, 0], abs=0.1)


def test_heat_without_readings_warms_the_field_as_the_full_model_does():
    """Open loop for 20 minutes at 200 W a zone against the full equations, cell by cell.

    0.1 K of reduction and the losses held over a tick: within 0.5 K of a rise of 90 K."""
    q = quiet()
    model = q.reduced.model
    T = np.full(q.grid.x.size, 22.0)
    start = replace(
        first_state(q, 0, observed(q, [22.0, 22.0, 22.0])),
        belief=Gaussian(_mean_of(q, T), np.zeros((q.blocks.size, q.blocks.size))),
    )
    called, around = np.array([200.0, 200.0]), np.array([22.0] * len(q.around_u))
    state = start
    for _ in range(600):
        belief, heater = forecast_step(q, state, TICK_US, called, around)
        state = replace(state, belief=belief, heater_W=heater)
    full = _full_heat_up(model, q, 1200.0, 200.0)
    assert field(q, state) == pytest.approx(full, abs=0.5)


def _mean_of(q, T):
    mean = np.zeros(q.blocks.size)
    mean[q.blocks.a] = project(q.reduced, T)
    mean[q.blocks.L] = q.steps.system.sensors @ mean[q.blocks.a]
    return mean


def _full_heat_up(model, q, seconds, watts):
    """Explicit Euler on all cells with the true losses and lagging heaters."""
    T, p, dt = np.full(model.capacity.size, 22.0), 0.0, 0.1
    u = q.inputs(np.zeros(2), np.full(len(q.around_u), 22.0))
    K = conduction_matrix(q.grid, model.stack.sheet_conductance(120.0))
    shape = model.B[:, list(q.zone_u)].sum(axis=1)
    for _ in range(round(seconds / dt)):
        p += dt * (watts - p) / 20.0
        T = T + dt * (shape * p - K @ T - loss_watts(model, T, u)) / model.capacity
    return T


def test_readings_of_a_missing_thermocouple_are_not_made_up():
    """Without A the field near A is less certain than with it."""
    q = quiet()
    there = state = first_state(q, 0, observed(q, [120.0, 120.0, 120.0], (100.0, 100.0)))
    for _ in range(300):
        there, _ = advance(q, there, TICK_US, observed(q, [120.0, 120.0, 120.0], (100.0, 100.0)))
        state, _ = advance(q, state, TICK_US, observed(q, [np.nan, 120.0, 120.0], (100.0, 100.0)))
    near = np.hypot(q.grid.x - 0.1, q.grid.y - 0.1).argmin()
    assert field_sd(q, state)[near] > 1.2 * field_sd(q, there)[near]


def test_a_tick_without_readings_only_widens():
    """Nothing heard: no innovation, and no variance of the field falls."""
    q = quiet()
    state = first_state(q, 0, observed(q, [120.0, 120.0, 120.0], (100.0, 100.0)))
    for _ in range(100):
        state, _ = advance(q, state, TICK_US, observed(q, [120.0, 120.0, 120.0], (100.0, 100.0)))
    blind, innovation = advance(q, state, TICK_US, observed(q, [np.nan] * 3, (100.0, 100.0)))
    assert innovation.rows == ()
    near = np.hypot(q.grid.x - 0.1, q.grid.y - 0.1).argmin()
    assert field_sd(q, blind)[near] > field_sd(q, state)[near]


def test_a_misfit_keeps_the_readings_from_teaching_the_plate_new_properties():
    """A thermocouple suddenly 20 K low moves the field, not conductivity and losses."""
    q = quiet()
    state = first_state(q, 0, observed(q, [120.0, 120.0, 120.0], (60.0, 60.0)))
    for _ in range(300):
        state, _ = advance(q, state, TICK_US, observed(q, [120.0, 120.0, 120.0], (60.0, 60.0)))
    theta = state.belief.mean[q.blocks.theta].copy()
    for _ in range(30):
        state, _ = advance(q, state, TICK_US, observed(q, [100.0, 120.0, 120.0], (60.0, 60.0)))
    assert state.misfit > 2.0
    assert state.belief.mean[q.blocks.theta] == pytest.approx(theta, abs=2e-3)


def test_a_reading_from_the_middle_of_a_tick_is_compared_with_the_middle():
    """On a ramp of 0.1 K/s a reading taken half-way through a 60 s tick is 3 K behind."""
    q = quiet(straight=True)
    state = first_state(q, 0, observed(q, [50.0, 50.0, 50.0], (300.0, 300.0)))
    for _ in range(200):
        prior, _ = forecast_step(q, state, TICK_US, np.array([300.0, 300.0]), state.around)
        seen = observed(q, prior.mean[q.blocks.L], (300.0, 300.0))
        state, _ = advance(q, state, TICK_US, seen)
    start, (end, _) = (
        state.belief.mean,
        forecast_step(q, state, MINUTE_US, np.array([300.0, 300.0]), state.around),
    )
    middle = q.H @ (start + end.mean) / 2
    assert (q.H @ end.mean - middle).mean() > 1.0
    _, innovation = advance(q, state, MINUTE_US, observed(q, middle, (300.0, 300.0), share=0.5))
    assert innovation.residual == pytest.approx(np.zeros(3), abs=1e-6)


def test_four_readings_in_a_tick_weigh_as_four():
    """The mean of four has a quarter of the variance of one."""
    q = quiet()
    state = first_state(q, 0, observed(q, [120.0, 120.0, 120.0]))
    _, one = advance(q, state, TICK_US, observed(q, [120.0, 120.0, 120.0]))
    _, four = advance(q, state, TICK_US, observed(q, [120.0, 120.0, 120.0], count=4.0))
    assert np.diag(one.S - four.S) == pytest.approx(0.75 * q.noise_var)


def test_the_uncertainty_grows_with_the_time_without_the_daemon():
    """Restarted after ten minutes: wider than after one."""
    q = quiet()
    state = first_state(q, 0, observed(q, [120.0, 120.0, 120.0], (100.0, 100.0)))
    for _ in range(300):
        state, _ = advance(q, state, TICK_US, observed(q, [120.0, 120.0, 120.0], (100.0, 100.0)))
    soon = restarted(q, state, state.at_us + MINUTE_US)
    late = restarted(q, state, state.at_us + 10 * MINUTE_US)
    assert field_sd(q, state).mean() < field_sd(q, soon).mean() < field_sd(q, late).mean()


def test_a_night_without_the_daemon_ends_at_room_temperature():
    """Off for eight hours, a hot plate is carried to the room, not to where the line through
    the losses at 120 degC would have it."""
    q = quiet()
    hot = first_state(q, 0, observed(q, [120.0, 120.0, 120.0]))
    cold = restarted(q, hot, hot.at_us + 8 * 60 * MINUTE_US)
    assert field(q, cold).mean() == pytest.approx(22.0, abs=0.5)


def test_a_clock_that_did_not_move_changes_nothing():
    """No time, no step."""
    q = quiet()
    state = first_state(q, 5, observed(q, [120.0, 120.0, 120.0]))
    assert restarted(q, state, 5).belief is state.belief


def test_every_cell_counts_to_the_nearest_heater():
    """The seam at 0.2 m parts left from right."""
    grid = build_grid(plate())
    zones = np.array(nearest_zone(plate(), grid))
    assert (zones[grid.x < 0.199] == "L").all()
    assert (zones[grid.x > 0.201] == "R").all()


def test_within_its_tolerance_class_a_thermocouple_may_be_off_by_anything():
    """IEC 60584-1: class 1 of type K is 1.5 degC up to 375 degC; JCGM 100:2008, 4.3.7:
    equal probability within limits of 1.5 K has the standard deviation 1.5 K / sqrt 3."""
    sensor = plate().sensors[0]
    assert bias_sd_K(sensor, 120.0) == pytest.approx(1.5 / 3**0.5)
    assert bias_sd_K(replace(sensor, tolerance_class=None), 120.0) == 0.2


def test_a_plate_whose_duty_is_unknown_is_far_less_certain_of_its_heat():
    """No duty on the bus: any zone may be on, so the heat is learnt from the readings."""
    q = quiet()
    state = first_state(q, 0, observed(q, [100.0] * 3))
    heard, _ = advance(q, state, TICK_US, observed(q, [100.0] * 3))
    deaf, _ = advance(q, state, TICK_US, replace(observed(q, [100.0] * 3), duty_heard=False))
    d = q.blocks.d
    assert (np.diag(deaf.belief.cov)[d] > np.diag(heard.belief.cov)[d]).all()


def test_delivered_watts_carry_the_doubt_about_all_heaters():
    """(called + d)(1 + theta): mean and standard deviation against 200,000 draws (1 %)."""
    q = quiet()
    k = q.blocks
    start = first_state(q, 0, observed(q, [100.0] * 3))
    mean, cov = start.belief.mean.copy(), start.belief.cov.copy()
    mean[k.d], mean[k.theta.start + POWER] = [10.0, -5.0], 0.03
    state = replace(start, belief=Gaussian(mean, cov), heater_W=np.array([200.0, 300.0]))
    both = [*range(k.d.start, k.d.stop), k.theta.start + POWER]
    drawn = np.random.default_rng(0).multivariate_normal(
        mean[both], cov[np.ix_(both, both)], 200_000
    )
    watts = (state.heater_W + drawn[:, :2]) * (1 + drawn[:, 2:])
    rows = power_rows(q, state)
    assert [r.zone for r in rows] == ["L", "R"]
    assert [r.called_W for r in rows] == [200.0, 300.0]
    assert [r.inferred_W for r in rows] == pytest.approx(watts.mean(axis=0), rel=0.01)
    assert [r.sd_W for r in rows] == pytest.approx(watts.std(axis=0), rel=0.01)
