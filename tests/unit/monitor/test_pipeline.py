"""One plate, tick by tick."""

from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from watched_plate import PRODUCT, ROOM, T0, TICK_US, monitor, plate, tick, ticks_of

from platewatch.compose import build_monitor, describe
from platewatch.monitor import pipeline
from platewatch.types import Action, AlarmState, FieldShot, Tick
from sim_sensors.control import Stage
from sim_sensors.simulation import Plant, Simulation, simulate

SECOND = 1_000_000
DEMO = Path(__file__).parents[3] / "config" / "demo-table.toml"
STAGES = (
    Stage("ramp", to_degC=120.0, K_per_s=0.05),
    Stage("soak", lasts_s=np.inf),
)


def simulation(**changes):
    return Simulation(Plant(plate(), stages=STAGES), **changes)


@cache
def heat_up(seconds=600, sample_s=2.0):
    """Ticks of the first minutes of a clean batch, one sample each."""
    run = simulation(sample_s=sample_s)
    samples = [run.step() for _ in range(round(seconds / sample_s))]
    return tuple(ticks_of(samples, round(sample_s * SECOND)))


def run(ticks, state=None, m=None):
    """All outcomes, and the state after the last tick."""
    m = m or monitor()
    state, outcomes = state or pipeline.first(m), []
    for t in ticks:
        state, outcome = pipeline.step(m, state, t)
        outcomes.append(outcome)
    return state, outcomes


def events(outcomes, alarm=""):
    return [e for o in outcomes for e in o.alarm_events if alarm in ("", e.alarm)]


def without(t, *names):
    """The tick with some channels silent; no name: all thermocouples."""
    silent = names or ("sensor/A", "sensor/B", "sensor/C")
    return replace(t, readings=tuple(r for r in t.readings if r.channel not in silent))


def test_a_clean_heat_up_raises_no_alarm():
    """Clean batch, first ten minutes: no alarm, and a picture in every tick."""
    state, outcomes = run(heat_up())
    assert events(outcomes) == []
    assert all(o.peak is not None for o in outcomes)
    assert not state.blind
    assert outcomes[-1].peak.cause == "none"


@pytest.mark.timeout(120)
def test_the_demonstration_plate_heats_up_for_ten_minutes_without_an_alarm():
    """config/demo-table.toml, clean batch, everything on as the daemon has it."""
    description = describe(DEMO)
    samples = simulate(Plant.of(description), "clean", until_s=600.0)
    _, outcomes = run(ticks_of(samples), m=build_monitor(description))
    assert len(outcomes) == 300
    assert events(outcomes) == []


def test_the_present_peak_is_the_true_one_within_its_band():
    """Peak of the simulation's own physics against 95 % of ours, over the heat-up."""
    sim = simulation()
    samples = [sim.step() for _ in range(450)]
    _, outcomes = run(ticks_of(samples))
    late = list(zip(samples, outcomes, strict=True))[150::15]
    inside = [
        abs(o.peak.now_degC - s.truth.peak_degC) <= 1.96 * o.peak.now_sd_K + 0.1 for s, o in late
    ]
    assert np.mean(inside) >= 0.9


def test_before_the_first_reading_nothing_is_claimed():
    """No thermocouple yet: no peak, no alarm, no blindness."""
    silent = [tick(T0 + k * TICK_US, {ROOM: 22.0}) for k in range(1, 20)]
    state, outcomes = run(silent)
    assert state.picture is None
    assert all(o.peak is None and not o.alarm_events for o in outcomes)


def near(m, state, x, y):
    """Standard deviation of the field at a place, K."""
    grid, V = m.quiet.grid, m.quiet.reduced.V
    row = V[np.hypot(grid.x - x, grid.y - y).argmin()]
    a = m.quiet.blocks.a
    return float(np.sqrt(row @ state.picture.belief.cov[a, a] @ row))


def test_a_silent_thermocouple_widens_the_band_near_itself():
    """A silent for thirteen minutes: at A wider by more than the tolerance class leaves of a
    doubt, at B as good as unchanged; with A back, as before to one in a hundred."""
    m, ticks = monitor(), heat_up(1200)
    full, _ = run(ticks[:590])
    state, _ = run(ticks[:200])
    state, outcomes = run([without(t, "sensor/A") for t in ticks[200:590]], state)
    gained_A = near(m, state, 0.1, 0.1) ** 2 - near(m, full, 0.1, 0.1) ** 2
    gained_B = near(m, state, 0.3, 0.1) ** 2 - near(m, full, 0.3, 0.1) ** 2
    assert gained_A > 5 * m.quiet.noise_var[0]
    assert gained_A > 10 * gained_B
    assert events(outcomes, "picture-blind") == []
    back, _ = run(ticks[590:], state)
    assert near(m, back, 0.1, 0.1) == pytest.approx(near(m, full, 0.1, 0.1), rel=0.01)


def test_without_any_thermocouple_the_picture_is_blind_once_and_within_ten_seconds():
    """One alarm, not one a tick; nothing else is claimed meanwhile; it returns at once."""
    ticks = heat_up()
    state, _ = run(ticks[:200])
    state, outcomes = run([without(t) for t in ticks[200:260]], state)
    found = events(outcomes)
    assert [e.alarm for e in found] == ["picture-blind"]
    assert found[0].at_us - ticks[199].at_us <= 10 * SECOND
    assert state.blind
    state, outcomes = run(ticks[260:], state)
    assert [e.to_state for e in events(outcomes)] == [AlarmState.RETURNED_UNACKNOWLEDGED]
    assert outcomes[0].gaps[0].from_us == ticks[199].at_us
    assert outcomes[0].gaps[0].to_us == ticks[260].at_us
    assert not state.blind
    assert sum(len(o.gaps) for o in outcomes) == 1


def test_blindness_is_found_again_soon_after_an_outage():
    """An outage of twenty minutes does not make the next one harder to see."""
    ticks = heat_up()
    state, _ = run(ticks[:60])
    state, outcomes = run([without(t) for t in ticks[60:80]], state)
    state, _ = run(ticks[80:90], state)
    _, outcomes = run([without(t) for t in ticks[90:110]], state)
    found = events(outcomes, "picture-blind")
    assert len(found) == 1
    assert found[0].at_us - ticks[89].at_us <= 12 * SECOND


def hot(m, value=140.0):
    """Ticks of a plate that sits above the limit."""
    names = {f"sensor/{s.name}": value for s in m.quiet.plate.sensors}
    return names | {"zone/L/duty": 0.2, "zone/R/duty": 0.2, ROOM: 22.0}


def hot_run(count=30, value=140.0):
    m = monitor()
    return run([tick(T0 + k * TICK_US, hot(m, value)) for k in range(1, count + 1)])


def test_a_plate_over_its_limit_is_announced_after_the_on_delay():
    """peak-now for the limit and for each raw reading; every message names place and value."""
    _, outcomes = hot_run()
    found = events(outcomes, "peak-now")
    assert {e.subject for e in found} == {"product", "A", "B", "C"}
    assert all(e.to_state is AlarmState.UNACKNOWLEDGED for e in found)
    assert all(e.at_us - T0 <= 14 * SECOND for e in found)
    product = next(e for e in found if e.subject == "product")
    assert "zone" in product.message
    assert product.limit_value == PRODUCT.value


def test_a_limit_for_the_record_only_raises_no_alarm():
    """The left zone's 140 degC is written down, not announced."""
    _, outcomes = hot_run(value=150.0)
    assert "left" not in {e.subject for e in events(outcomes)}
    assert "left" in {row.alarm_limit for o in outcomes for row in o.limits}


def test_an_acknowledged_alarm_is_acknowledged_by_name():
    """The person and the tick are in the record; the alarm stays active."""
    state, _ = hot_run()
    action = Action(7, T0 + 31 * TICK_US, "early shift", "ack", "peak-now", "product", "seen")
    last = tick(T0 + 31 * TICK_US, hot(monitor()), actions=(action,))
    state, outcomes = run([last], state)
    (event,) = events(outcomes)
    assert (event.subject, event.person, event.reason) == ("product", "early shift", "seen")
    assert event.to_state is AlarmState.ACKNOWLEDGED
    assert outcomes[0].applied == (7,)
    assert state.alarms["peak-now", "product"].state is AlarmState.ACKNOWLEDGED
    assert state.alarms["peak-now", "A"].state is AlarmState.UNACKNOWLEDGED


def test_one_acknowledgement_can_mean_every_subject_of_an_alarm():
    """No subject named: all of them."""
    state, _ = hot_run()
    action = Action(8, T0 + 31 * TICK_US, "early shift", "ack", "peak-now", "")
    state, _ = run([tick(T0 + 31 * TICK_US, hot(monitor()), actions=(action,))], state)
    found = {a.state for (name, _), a in state.alarms.items() if name == "peak-now"}
    assert found == {AlarmState.ACKNOWLEDGED}


def test_an_acknowledgement_of_nothing_changes_nothing_and_counts_as_applied():
    """A second acknowledgement, or one of an alarm that is not there."""
    action = Action(9, T0, "early shift", "ack", "peak-now", "product")
    first, *rest = heat_up()[:3]
    _, outcomes = run([replace(first, actions=(action,)), *rest])
    assert events(outcomes) == []
    assert outcomes[0].applied == (9,)


def test_backlog_raises_no_alarm_on_history():
    """A hot hour that arrives afterwards moves the picture, and no alarm."""
    m = monitor()
    late = [tick(T0 + k * TICK_US, hot(m), backlog=True) for k in range(1, 31)]
    state, outcomes = run(late)
    assert events(outcomes) == []
    assert outcomes[-1].peak.now_degC > 135.0
    _, outcomes = run([tick(T0 + k * TICK_US, hot(m)) for k in range(31, 60)], state)
    assert "product" in {e.subject for e in events(outcomes, "peak-now")}


def test_a_restart_goes_on_as_if_nothing_had_happened():
    """From the stored field: the same peaks as the run that was never stopped, to what
    rounding a covariance to float32 does (1e-7 of it, so far below 1e-3 K)."""
    ticks, m = heat_up(), monitor()
    state, outcomes = run(ticks[:240])
    shot = [o.shot for o in outcomes if o.shot is not None][-1]
    stored = replace(shot, cov=shot.cov.astype(np.float32).astype(np.float64))
    at = next(i for i, t in enumerate(ticks) if t.at_us == shot.at_us)
    _, whole = run(ticks[240:], state)
    _, again = run(ticks[at + 1 :], pipeline.resume(m, stored, {}))
    for one, other in zip(whole, again[240 - at - 1 :], strict=True):
        assert other.peak.now_degC == pytest.approx(one.peak.now_degC, abs=1e-3)
        assert other.peak.now_sd_K == pytest.approx(one.peak.now_sd_K, rel=1e-3)
    assert events(again) == []


def test_a_restart_keeps_the_alarms_that_people_have_not_seen_yet():
    """Unacknowledged before, unacknowledged after; and not announced a second time."""
    state, outcomes = hot_run()
    shot = [o.shot for o in outcomes if o.shot is not None][-1]
    states = {key: alarm.state for key, alarm in state.alarms.items()}
    again = pipeline.resume(monitor(), shot, states)
    _, outcomes = run([tick(T0 + k * TICK_US, hot(monitor())) for k in range(31, 60)], again)
    assert events(outcomes, "peak-now") == []


def test_a_restart_after_the_night_begins_with_what_is_read():
    """Stopped at 110 degC in the evening, 22 degC in the morning: no alarm, and at once the
    picture of a cold plate."""
    m = monitor()
    warm = hot(m, 110.0)
    _, outcomes = run([tick(T0 + k * TICK_US, warm) for k in range(1, 60)])
    shot = [o.shot for o in outcomes if o.shot is not None][-1]
    morning = T0 + 12 * 3600 * SECOND
    cold = hot(m, 22.0) | {"zone/L/duty": 0.0, "zone/R/duty": 0.0}
    ticks = [tick(morning + k * TICK_US, cold) for k in range(1, 60)]
    _, outcomes = run(ticks, pipeline.resume(m, shot, {}))
    assert events(outcomes) == []
    assert all(abs(o.peak.now_degC - 22.0) < 6.0 for o in outcomes)
    assert outcomes[0].gaps[0].from_us == shot.at_us


def test_the_heat_that_went_on_without_the_daemon_is_believed():
    """Stopped for ten minutes of a steady soak: the picture goes on, not begun anew."""
    m = monitor()
    warm = hot(m, 110.0)
    state, outcomes = run([tick(T0 + k * TICK_US, warm) for k in range(1, 400)])
    later = T0 + (400 * 2 + 600) * SECOND
    after, outcomes = run([tick(later, warm)], state)
    assert after.started_us == state.started_us
    assert outcomes[0].peak.now_sd_K < 3 * 1.5


def test_a_field_of_another_description_is_not_taken_over():
    """Other basis, other size: a fresh start."""
    state, outcomes = run(heat_up()[:60])
    shot = [o.shot for o in outcomes if o.shot is not None][-1]
    for other in (
        replace(shot, basis="another"),
        replace(shot, mean=shot.mean[:-1]),
        replace(shot, drive=shot.drive[:-1]),
    ):
        assert pipeline.resume(monitor(), other, {}).picture is None
    assert pipeline.resume(monitor(), None, {}).picture is None
    assert state.picture is not None


def test_a_daemon_started_beside_a_hot_plate_raises_no_false_alarm():
    """Begun at 120 degC in the middle of a soak, fifteen minutes long."""
    sim = simulation()
    while sim.at_s < 3600:
        sim.step()
    samples = [sim.step() for _ in range(450)]
    assert max(s.truth.peak_degC for s in samples) < 134.0
    _, outcomes = run(ticks_of(samples))
    assert events(outcomes) == []
    truth = samples[-1].truth.peak_degC
    assert outcomes[-1].peak.now_degC == pytest.approx(truth, abs=3.0)


@pytest.mark.parametrize(("sample_s", "seconds"), [(0.1, 30.0), (60.0, 1800.0)])
def test_ticks_of_a_tenth_of_a_second_and_of_a_minute_work(sample_s, seconds):
    """The same heat-up, other ticks: no alarm, and the true peak within the band."""
    sim = simulation(sample_s=sample_s)
    samples = [sim.step() for _ in range(round(seconds / sample_s))]
    _, outcomes = run(ticks_of(samples, round(sample_s * SECOND)))
    assert events(outcomes) == []
    off = outcomes[-1].peak.now_degC - samples[-1].truth.peak_degC
    assert abs(off) < 3 * outcomes[-1].peak.now_sd_K + 0.5


def test_a_thermocouple_that_speaks_once_a_minute_is_not_blindness():
    """Ticks of two seconds, readings every minute: that is its sample time."""
    full = heat_up()
    ticks = [t if k % 30 == 0 else without(t) for k, t in enumerate(full)]
    state, outcomes = run(ticks)
    assert events(outcomes) == []
    assert not state.blind


def test_a_gateway_that_falls_silent_for_good_is_blindness_even_after_one_reading():
    """One reading and never again: within three minutes."""
    first, *rest = heat_up()
    _, outcomes = run([first, *[without(t) for t in rest]])
    found = events(outcomes, "picture-blind")
    assert len(found) == 1
    assert found[0].at_us - first.at_us <= 182 * SECOND


def test_one_long_tick_for_a_long_silence_carries_the_plate_to_the_room():
    """Switched off and silent for six hours: the picture cools, blindness stays one alarm."""
    state, _ = run(heat_up())
    off_us = heat_up()[-1].at_us + TICK_US
    off = [tick(off_us, {"zone/L/duty": 0.0, "zone/R/duty": 0.0})]
    state, _ = run(off, state)
    state, outcomes = run([Tick(off_us + 6 * 3600 * SECOND, 6 * 3600 * SECOND)], state)
    assert [e.alarm for e in events(outcomes)] == ["picture-blind"]
    peak = outcomes[0].peak
    assert abs(peak.now_degC - 22.0) < 2 * peak.now_sd_K + 1.0


def test_a_field_is_kept_every_minute_and_at_every_alarm():
    """Enough to look back and to restart."""
    _, outcomes = run(heat_up())
    shots = [o.shot for o in outcomes if o.shot is not None]
    assert len(shots) == 10
    assert all(isinstance(s, FieldShot) and s.cov.shape == (s.mean.size,) * 2 for s in shots)
    _, outcomes = hot_run()
    assert all(o.shot is not None for o in outcomes if o.alarm_events)


def test_watts_are_told_by_zone_every_ten_seconds():
    """Called for and inferred."""
    _, outcomes = run(heat_up())
    rows = [o.zone_powers for o in outcomes if o.zone_powers]
    assert len(rows) == 60
    assert [r.zone for r in rows[0]] == ["L", "R"]
    last = rows[-1][0]
    assert last.inferred_W == pytest.approx(last.called_W, abs=4 * last.sd_W)


def test_the_same_ticks_give_the_same_outcomes_to_the_last_bit():
    """Nothing hidden, nothing random: replay is exact."""
    _, one = run(heat_up()[:150])
    _, other = run(heat_up()[:150])
    assert [o.peak for o in one] == [o.peak for o in other]
    assert [o.limits for o in one] == [o.limits for o in other]


def test_a_state_that_was_stepped_from_is_not_changed_by_it():
    """A failed step leaves the last good state."""
    state, _ = run(heat_up()[:60])
    before = state.picture.belief.mean.copy(), state.picture.belief.cov.copy()
    run(heat_up()[60:70], state)
    assert np.array_equal(before[0], state.picture.belief.mean)
    assert np.array_equal(before[1], state.picture.belief.cov)
