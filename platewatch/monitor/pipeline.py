"""One step of one plate: readings in, picture, forecast and alarms out.  No I/O.

The daemon and the replay run this same function; only where ticks come from differs.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from platewatch.monitor import conditions as ask
from platewatch.monitor.alarms import ACTIVE, Alarm, Condition, Event, judge, next_state
from platewatch.monitor.conditions import Estimate, Words
from platewatch.monitor.estimator import (
    FORGET_AFTER_US,
    LONGEST_STEP_US,
    FieldState,
    Observed,
    Quiet,
    advance,
    first_state,
    is_another_plate,
    restarted,
)
from platewatch.monitor.forecast import (
    carry,
    crossing_times,
    horizon_times,
    hottest_ahead,
    quantile_times,
    state_draws,
)
from platewatch.monitor.inputs import Heard, nothing_heard, take_in
from platewatch.monitor.limits import AlarmLimit, LimitKind
from platewatch.monitor.loops import Loops, LoopStart, set_points_ahead
from platewatch.monitor.options import EstimatorOptions, ForecastOptions
from platewatch.monitor.peak import WHOLE_PLATE, Hottest, Places, hottest_now, probability_over
from platewatch.monitor.recipe import Recipe
from platewatch.types import (
    Action,
    AlarmEvent,
    AlarmState,
    Array,
    FieldShot,
    Gap,
    Gaussian,
    LimitRow,
    Outcome,
    PeakRow,
    Tick,
    ZonePowerRow,
)
from platewatch.units import TemperatureUnit

ZONE_POWER_EVERY_US = 10_000_000
SHOT_EVERY_US = 60_000_000
SETTLED_SD_K = 3.0  # the present peak is known this well once the filter has found its feet
SETTLED_AFTER_US = 600_000_000
NEAR_LIMIT_K = 20.0
CAUSE_NONE = "none"


@dataclass(frozen=True)
class Monitor:
    """Everything about one plate that does not change from tick to tick."""

    quiet: Quiet
    loops: Loops
    where: Places
    draws: Array
    limits: tuple[AlarmLimit, ...]
    recipes: tuple[Recipe, ...]
    estimator: EstimatorOptions
    forecast: ForecastOptions
    unit: TemperatureUnit

    @property
    def words(self) -> Words:
        return Words(self.quiet.plate, self.unit)

    @property
    def peak_limits(self) -> tuple[AlarmLimit, ...]:
        return ask.enabled(self.limits, LimitKind.PEAK)

    @property
    def shown_limit(self) -> AlarmLimit | None:
        """The lowest enabled peak limit, which peak rows refer to."""
        alarming = [limit for limit in self.peak_limits if not limit.record_only]
        return min(alarming or self.peak_limits, key=lambda limit: limit.value, default=None)


@dataclass(frozen=True)
class Ahead:
    """The last forecast: by region the coming peak, by limit its passing."""

    at_us: int
    hottest: Mapping[str, Hottest]
    passing: Mapping[str, tuple[float, tuple[float | None, float | None, float | None]]]


@dataclass(frozen=True)
class State:
    """What one plate carries from tick to tick.  `picture` is None before the first reading."""

    heard: Heard
    picture: FieldState | None = None
    ahead: Ahead | None = None
    alarms: Mapping[tuple[str, str], Alarm] = field(default_factory=dict)
    started_us: int = 0
    settled: bool = False
    silent_since_us: int = 0
    blind: bool = False
    shot_us: int = 0
    power_us: int = 0
    integral: Array | None = None  # (nz,) of the controllers, nan where not known


def first(monitor: Monitor) -> State:
    """Before anything was heard."""
    return State(nothing_heard(monitor.quiet))


def resume(
    monitor: Monitor, shot: FieldShot | None, alarms: Mapping[tuple[str, str], AlarmState]
) -> State:
    """After a restart: the last stored field, if it fits the description, and the alarms."""
    state = replace(first(monitor), alarms={key: Alarm(s) for key, s in alarms.items()})
    quiet = monitor.quiet
    if shot is None or shot.basis != quiet.reduced.basis_hash:
        return state
    nz, nu = len(quiet.zone_u), len(quiet.around_u)
    if shot.mean.size != quiet.blocks.size or shot.drive.size != 3 * nz + nu + 1:
        return state
    heater, called, duty, around, rest = np.split(shot.drive, [nz, 2 * nz, 3 * nz, 3 * nz + nu])
    field_state = FieldState(
        shot.at_us, Gaussian(shot.mean, shot.cov), heater, called, around, float(rest[0])
    )
    heard = replace(state.heard, around=around, duty=duty)
    return replace(
        state,
        picture=field_state,
        heard=heard,
        started_us=shot.at_us,
        silent_since_us=shot.at_us,
        settled=True,
    )


def step(monitor: Monitor, state: State, tick: Tick) -> tuple[State, Outcome]:
    """One tick of one plate."""
    heard, seen = take_in(monitor.quiet, state.heard, tick, monitor.unit)
    state = replace(state, heard=heard, integral=_controllers(monitor, state, heard, tick))
    if state.picture is None and not seen.sensors:
        alarms, events = _acknowledge(monitor, state.alarms, tick)
        return replace(state, alarms=alarms), Outcome(
            tick.at_us, alarm_events=events, applied=tuple(a.seq for a in tick.actions)
        )
    state, gaps = _see(monitor, state, tick, seen)
    assert state.picture is not None
    now = _now(monitor, state.picture)
    state = _settle(state, tick, now[WHOLE_PLATE])
    if _forecast_due(monitor, state, tick):
        state = replace(state, ahead=_look_ahead(monitor, state, tick))
    limit_rows = _limit_rows(monitor, state, tick)
    alarms, acknowledged = _acknowledge(monitor, state.alarms, tick)
    found = [] if tick.backlog else _conditions(monitor, state, tick, now)
    alarms, raised = _judge(alarms, found, tick)
    state = replace(state, alarms=alarms)
    events = acknowledged + raised
    state, shot = _shot(monitor, state, tick, bool(events))
    state, powers = _powers(monitor, state, tick)
    return state, Outcome(
        at_us=tick.at_us,
        peak=_peak_row(monitor, state, tick, now[WHOLE_PLATE]),
        zone_powers=powers,
        limits=limit_rows,
        alarm_events=events,
        shot=shot,
        gaps=gaps,
        applied=tuple(a.seq for a in tick.actions),
    )


def _see(
    monitor: Monitor, state: State, tick: Tick, seen: Observed
) -> tuple[State, tuple[Gap, ...]]:
    """Move the field to the end of the tick and take in its readings."""
    if state.picture is None:
        return _begun(monitor, state, tick, seen), ()
    silent_us = tick.at_us - state.silent_since_us
    # A tick that stands for a long silence is gone through in short steps.
    last_us = tick.dt_us if seen.sensors else min(tick.dt_us, LONGEST_STEP_US)
    start = restarted(monitor.quiet, state.picture, tick.at_us - last_us)
    moved, innovation = advance(monitor.quiet, start, tick.at_us - start.at_us, seen)
    if silent_us >= FORGET_AFTER_US and is_another_plate(innovation):
        since = state.silent_since_us
        state = replace(_begun(monitor, state, tick, seen), silent_since_us=since)
    else:
        state = replace(state, picture=moved)
    blind = not seen.sensors and silent_us >= _blind_after_us(state)
    gaps: tuple[Gap, ...] = ()
    if seen.sensors:
        first_us = tick.at_us - tick.dt_us
        if first_us - state.silent_since_us >= _blind_after_us(state):
            gaps = (Gap(state.silent_since_us, tick.at_us, "no usable reading"),)
        state = replace(state, silent_since_us=tick.at_us)
    return replace(state, blind=blind), gaps


def _begun(monitor: Monitor, state: State, tick: Tick, seen: Observed) -> State:
    """The picture made from this tick's readings alone."""
    picture = first_state(monitor.quiet, tick.at_us, seen)
    at_us = tick.at_us
    return replace(
        state, picture=picture, started_us=at_us, silent_since_us=at_us, settled=False, ahead=None
    )


def _blind_after_us(state: State) -> int:
    known = [interval for interval in state.heard.interval_us if interval]
    return ask.blind_after_us(min(known, default=0))


def _now(monitor: Monitor, field_state: FieldState) -> dict[str, Hottest]:
    return {
        region: hottest_now(monitor.quiet, monitor.where, field_state.belief, monitor.draws, region)
        for region in monitor.where.regions
    }


def _settle(state: State, tick: Tick, now: Hottest) -> State:
    if state.settled:
        return state
    waited = tick.at_us - state.started_us >= SETTLED_AFTER_US
    return replace(state, settled=waited or now.sd_K <= SETTLED_SD_K)


def _forecast_due(monitor: Monitor, state: State, tick: Tick) -> bool:
    if state.ahead is None:
        return True
    return tick.at_us - state.ahead.at_us >= round(monitor.forecast.every_s * 1e6)


def _errors_K(monitor: Monitor, heard: Heard) -> Array:
    """(nz,) set-point minus reading of each loop; nan where loop, reading or duty is not known."""
    error = heard.set_point - heard.degC[monitor.loops.sensor]
    return np.where(np.isfinite(heard.duty) & (monitor.loops.closed > 0), error, np.nan)


def _controllers(monitor: Monitor, state: State, heard: Heard, tick: Tick) -> Array:
    """What the controllers' integrals have come to, as far as can be told from outside."""
    before = state.integral
    if before is None:
        before = np.full(heard.duty.size, np.nan)
    error = _errors_K(monitor, heard)
    live = np.isfinite(error)
    duty, error = np.where(live, heard.duty, 0.0), np.where(live, error, 0.0)
    after = monitor.loops.follow(before, duty, error, tick.dt_us / 1e6)
    return np.where(live, after, np.nan)


def loop_start(monitor: Monitor, state: State) -> LoopStart:
    """What the controllers are doing, from what was last heard of them."""
    heard = state.heard
    ahead = set_points_ahead(
        heard.set_point, heard.set_point_slope, monitor.recipes, horizon_times(monitor.forecast)
    )
    live = np.isfinite(_errors_K(monitor, heard))
    integral = np.zeros(live.size) if state.integral is None else state.integral
    return LoopStart(
        duty=np.nan_to_num(heard.duty),
        integral=np.nan_to_num(integral),
        set_points=np.where(live[:, None], ahead, 0.0),
        live=live,
    )


def _look_ahead(monitor: Monitor, state: State, tick: Tick) -> Ahead:
    """Carry the present belief over the horizon and hold it against every peak limit."""
    assert state.picture is not None
    quiet, where = monitor.quiet, monitor.where
    X = state_draws(state.picture, monitor.draws)
    path = carry(
        quiet, state.picture, monitor.loops, loop_start(monitor, state), X, monitor.forecast
    )
    regions = {r: hottest_ahead(quiet, where, path, r) for r in where.regions}
    passing = {}
    for limit in monitor.peak_limits:
        hottest, tops = regions[limit.zone]
        times = crossing_times(path.times_s, tops, limit.value)
        p = probability_over(hottest.samples, limit.value)
        passing[limit.name] = (p, quantile_times(times))
    return Ahead(tick.at_us, {r: h for r, (h, _) in regions.items()}, passing)


def _limit_rows(monitor: Monitor, state: State, tick: Tick) -> tuple[LimitRow, ...]:
    if state.ahead is None or state.ahead.at_us != tick.at_us:
        return ()
    return tuple(
        LimitRow(tick.at_us, name, p, to_limit)
        for name, (p, to_limit) in state.ahead.passing.items()
    )


def _conditions(
    monitor: Monitor, state: State, tick: Tick, now: Mapping[str, Hottest]
) -> list[Condition]:
    """Every alarm's condition; while blind, only blindness itself is judged."""
    words = monitor.words
    shown = monitor.shown_limit
    near = shown is not None and now[WHOLE_PLATE].degC > shown.value - NEAR_LIMIT_K
    silent_us, after_us = tick.at_us - state.silent_since_us, _blind_after_us(state)
    found = [ask.picture_blind(words, silent_us, after_us, near)]
    if state.blind or state.ahead is None:
        return found
    for limit in monitor.peak_limits:
        if not limit.record_only:
            estimate = _estimate(monitor, state, limit, now[limit.zone])
            found += [ask.peak_coming(words, estimate), ask.peak_now(words, estimate)]
    for limit in ask.sensor_limits(monitor.limits):
        for i, sensor in enumerate(monitor.quiet.plate.sensors):
            fresh = tick.at_us - state.heard.sensor_us[i] <= after_us
            if limit.sensor not in ("", sensor.name) or not fresh or limit.record_only:
                continue
            reading = float(state.heard.degC[i])
            # Far below, with no alarm standing, there is nothing to judge.
            if reading >= limit.value - limit.deadband or ("peak-now", sensor.name) in state.alarms:
                found.append(ask.sensor_over(words, limit, sensor.name, reading))
    return found


def _estimate(monitor: Monitor, state: State, limit: AlarmLimit, now: Hottest) -> Estimate:
    assert state.ahead is not None
    ahead = state.ahead.hottest[limit.zone]
    p, to_limit = state.ahead.passing[limit.name]
    return Estimate(
        limit=limit,
        now_degC=now.degC,
        now_low_degC=now.quantile(1 - ask.UPPER),
        now_high_degC=now.quantile(ask.UPPER),
        now_judged_degC=now.quantile(ask.UPPER if state.settled else 0.5),
        now_place=monitor.words.place(*_place(monitor.quiet, now.cell)),
        ahead_degC=ahead.degC,
        ahead_low_degC=ahead.quantile(1 - ask.UPPER),
        ahead_high_degC=ahead.quantile(ask.UPPER),
        ahead_place=monitor.words.place(*_place(monitor.quiet, ahead.cell)),
        p_over=p,
        to_limit_s=to_limit,
        settled=state.settled,
    )


def _place(quiet: Quiet, cell: int) -> tuple[str, float, float]:
    """Zone and centre of a cell, mm."""
    grid = quiet.grid
    return quiet.cell_zone[cell], float(grid.x[cell] * 1e3), float(grid.y[cell] * 1e3)


def _acknowledge(
    monitor: Monitor, alarms: Mapping[tuple[str, str], Alarm], tick: Tick
) -> tuple[dict[tuple[str, str], Alarm], tuple[AlarmEvent, ...]]:
    """Apply what people asked for, in the order they asked."""
    moved = dict(alarms)
    events = []
    for action in tick.actions:
        for key in [k for k in moved if _meant(action, k)]:
            alarm = moved[key]
            state = next_state(alarm.state, Event(action.verb))
            if state is not alarm.state:
                moved[key] = replace(alarm, state=state)
                events.append(_by_person(action, key, alarm.state, state, tick))
    return moved, tuple(events)


def _meant(action: Action, key: tuple[str, str]) -> bool:
    alarm, subject = key
    return (
        action.verb in set(Event) - {Event.RAISE, Event.CLEAR}
        and action.alarm == alarm
        and action.subject in ("", subject)
    )


def _by_person(
    action: Action, key: tuple[str, str], before: AlarmState, after: AlarmState, tick: Tick
) -> AlarmEvent:
    return AlarmEvent(
        at_us=tick.at_us,
        alarm=key[0],
        subject=key[1],
        place="",
        from_state=before,
        to_state=after,
        priority="",
        value=None,
        limit_value=None,
        cause="",
        message=f"acknowledged by {action.person}",
        person=action.person,
        reason=action.reason,
    )


def _judge(
    alarms: dict[tuple[str, str], Alarm], found: list[Condition], tick: Tick
) -> tuple[dict[tuple[str, str], Alarm], tuple[AlarmEvent, ...]]:
    """Move every alarm by its condition."""
    events = []
    for condition in found:
        before = alarms.get(condition.key, Alarm())
        after = judge(before, condition, tick.at_us)
        if after is not before:
            alarms[condition.key] = after
        if after.state is not before.state:
            events.append(_changed(condition, before.state, after.state, tick))
    return alarms, tuple(events)


def _changed(condition: Condition, before: AlarmState, after: AlarmState, tick: Tick) -> AlarmEvent:
    return AlarmEvent(
        at_us=tick.at_us,
        alarm=condition.alarm,
        subject=condition.subject,
        place=condition.place,
        from_state=before,
        to_state=after,
        priority=condition.priority,
        value=condition.value,
        limit_value=condition.limit_value,
        cause=condition.cause,
        message=condition.message if after in ACTIVE else "returned to normal",
    )


def _shot(
    monitor: Monitor, state: State, tick: Tick, asked: bool
) -> tuple[State, FieldShot | None]:
    """The state itself, once a minute and at every alarm event."""
    if not asked and tick.at_us - state.shot_us < SHOT_EVERY_US:
        return state, None
    assert state.picture is not None
    f = state.picture
    drive = np.concatenate((f.heater_W, f.called_W, state.heard.duty, f.around, [f.misfit]))
    basis = monitor.quiet.reduced.basis_hash
    shot = FieldShot(tick.at_us, basis, f.belief.mean, f.belief.cov, drive)
    return replace(state, shot_us=tick.at_us), shot


def _powers(monitor: Monitor, state: State, tick: Tick) -> tuple[State, tuple[ZonePowerRow, ...]]:
    """Watts called for and delivered, by zone."""
    if tick.at_us - state.power_us < ZONE_POWER_EVERY_US:
        return state, ()
    assert state.picture is not None
    f, d = state.picture, monitor.quiet.blocks.d
    sd = np.sqrt(np.diag(f.belief.cov)[d])
    rows = tuple(
        ZonePowerRow(tick.at_us, zone.name, float(called), float(called + more), float(spread))
        for zone, called, more, spread in zip(
            monitor.quiet.plate.zones, f.heater_W, f.belief.mean[d], sd, strict=True
        )
    )
    return replace(state, power_us=tick.at_us), rows


def _peak_row(monitor: Monitor, state: State, tick: Tick, now: Hottest) -> PeakRow:
    assert state.ahead is not None
    ahead = state.ahead.hottest[WHOLE_PLATE]
    zone, x_mm, y_mm = _place(monitor.quiet, now.cell)
    ahead_zone, ahead_x, ahead_y = _place(monitor.quiet, ahead.cell)
    limit = monitor.shown_limit
    p, to_limit = state.ahead.passing[limit.name] if limit else (None, (None, None, None))
    return PeakRow(
        at_us=tick.at_us,
        now_degC=now.degC,
        now_sd_K=now.sd_K,
        now_x_mm=x_mm,
        now_y_mm=y_mm,
        now_zone=zone,
        ahead_degC=ahead.degC,
        ahead_sd_K=ahead.sd_K,
        ahead_in_s=ahead.at_s,
        ahead_x_mm=ahead_x,
        ahead_y_mm=ahead_y,
        ahead_zone=ahead_zone,
        limit_degC=limit.value if limit else None,
        p_over=p,
        to_limit_s=to_limit[1],
        cause=CAUSE_NONE,
    )
