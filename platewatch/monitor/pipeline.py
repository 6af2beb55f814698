"""One step of one plate: readings in, picture, forecast and alarms out.  No I/O.

The daemon and the replay run this same function; only where ticks come from differs.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from platewatch.monitor import conditions as ask
from platewatch.monitor import verdicts
from platewatch.monitor.alarms import Condition
from platewatch.monitor.annunciate import apply_actions, apply_conditions
from platewatch.monitor.causes import layer, plain
from platewatch.monitor.causes.settled import lasting_heat, left_out, missed_now, without
from platewatch.monitor.causes.views import View
from platewatch.monitor.conditions import Estimate
from platewatch.monitor.control import integrals, loop_start
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
from platewatch.monitor.forecast import horizon_times
from platewatch.monitor.inputs import take_in
from platewatch.monitor.limits import AlarmLimit
from platewatch.monitor.outlook import Prospect, look_ahead, now_of, present, worst_of
from platewatch.monitor.peak import WHOLE_PLATE, Hottest
from platewatch.monitor.shots import power_rows, shot_of
from platewatch.monitor.watched import Monitor, State, first, resume
from platewatch.types import (
    Array,
    CauseRow,
    FieldShot,
    Gap,
    LimitRow,
    Outcome,
    PeakRow,
    Tick,
    ZonePowerRow,
)

ZONE_POWER_EVERY_US = 10_000_000
SHOT_EVERY_US = 60_000_000
SETTLED_SD_K = 3.0  # the present peak is known this well once the filter has found its feet
SETTLED_AFTER_US = 600_000_000
YOUNG_US = 600_000_000  # a plate watched for less is begun anew without a lying thermocouple
NEAR_LIMIT_K = 20.0
CAUSES_EVERY_US = 10_000_000


__all__ = ["Monitor", "State", "first", "resume", "step"]


def step(monitor: Monitor, state: State, tick: Tick) -> tuple[State, Outcome]:
    """One tick of one plate."""
    heard, seen = take_in(monitor.quiet, state.heard, tick, monitor.unit)
    state = replace(
        state, heard=heard, integral=integrals(monitor.loops, state.integral, heard, tick.dt_us)
    )
    if state.picture is None and not seen.sensors:
        alarms, events = apply_actions(state.alarms, tick)
        return replace(state, alarms=alarms), Outcome(
            tick.at_us, alarm_events=events, applied=tuple(a.seq for a in tick.actions)
        )
    before, everyone = state.picture, seen
    if state.causes is not None:
        assert monitor.causes is not None
        seen = without(seen, left_out(state.causes.settled, monitor.quiet))
        if before is not None:
            showing = _showing(monitor, state)
            causes = layer.review_settled(monitor.causes, state.causes, before, everyone, showing)
            lasting = lasting_heat(causes.settled, before.at_us)
            state = replace(state, causes=causes, picture=replace(before, extra=lasting))
    state, gaps = _see(monitor, state, tick, seen)
    state = _plain(monitor, state, before, tick, everyone)
    state = _attend(monitor, state, before, tick, seen)
    assert state.picture is not None
    fresh = present(monitor.means, state.picture.belief, _missed(state))
    state = _settle(state, tick, fresh[WHOLE_PLATE])
    if _forecast_due(monitor, state, tick):
        state = _look(monitor, state)
    assert state.ahead is not None
    now = now_of(state.ahead, fresh)
    alarms, acknowledged = apply_actions(state.alarms, tick)
    found = [] if tick.backlog else _conditions(monitor, state, tick, now)
    alarms, raised = apply_conditions(alarms, found, tick)
    state = replace(state, alarms=alarms)
    events = acknowledged + raised
    state, shot = _shot(monitor, state, tick, bool(events))
    state, powers = _powers(monitor, state, tick)
    state, cause_rows = _causes(monitor, state, tick)
    return state, Outcome(
        at_us=tick.at_us,
        peak=_peak_row(monitor, state, tick, now[WHOLE_PLATE]),
        zone_powers=powers,
        limits=_limit_rows(monitor, state, tick),
        causes=cause_rows,
        alarm_events=events,
        shot=shot,
        gaps=gaps,
        question=state.question,
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
    at_us = tick.at_us
    picture = first_state(monitor.quiet, at_us, seen)
    anew = replace(state, picture=picture, settled=False, ahead=None, causes=None)
    return replace(anew, started_us=at_us, silent_since_us=at_us)


def _blind_after_us(state: State) -> int:
    known = [interval for interval in state.heard.interval_us if interval]
    return ask.blind_after_us(min(known, default=0))


def _settle(state: State, tick: Tick, now: Hottest) -> State:
    if state.settled:
        return state
    waited = tick.at_us - state.started_us >= SETTLED_AFTER_US
    return replace(state, settled=waited or now.sd_K <= SETTLED_SD_K)


def _forecast_due(monitor: Monitor, state: State, tick: Tick) -> bool:
    if state.ahead is None:
        return True
    return tick.at_us - state.ahead.at_us >= round(monitor.forecast.every_s * 1e6)


def _attend(
    monitor: Monitor, state: State, before: FieldState | None, tick: Tick, seen: Observed
) -> State:
    """Let the bank of causes watch this tick, once the filter has found its feet."""
    model = monitor.causes
    if model is None or before is None or not state.settled:
        return state
    if tick.at_us - state.started_us < layer.WARM_UP_US:
        return state
    causes = state.causes or layer.State(tuple(range(len(monitor.quiet.plate.sensors))))
    causes = layer.take_evidence(model, causes, tick)
    if not seen.sensors:
        return replace(state, causes=replace(causes, watch=None, seen=None, past=(), views=()))
    dt_us = tick.at_us - before.at_us
    return replace(state, causes=layer.attend(model, causes, before, dt_us, seen))


def _plain(
    monitor: Monitor, state: State, before: FieldState | None, tick: Tick, everyone: Observed
) -> State:
    """Leave out thermocouples that show by themselves that they are at fault."""
    model = monitor.causes
    if model is None or tick.backlog:
        return state
    known = state.plain or plain.begin(monitor.quiet)
    junctions, off = state.heard.junctions, model.options.off
    at_us, dt_us = tick.at_us, tick.dt_us
    now = plain.watch(monitor.quiet, known, at_us, dt_us, everyone, before, junctions, off)
    state = replace(state, plain=now)
    if not now.found or state.picture is None:
        return state
    causes = state.causes or layer.State(tuple(range(len(monitor.quiet.plate.sensors))))
    young = tick.at_us - state.started_us < YOUNG_US
    causes, picture = layer.leave_out_plain(model, causes, state.picture, everyone, now, young)
    return replace(state, causes=causes, picture=picture)


def _showing(monitor: Monitor, state: State) -> frozenset[str]:
    """Thermocouples whose reading still shows a fault by itself."""
    found = () if state.plain is None else state.plain.found
    return frozenset(monitor.quiet.plate.sensors[i].name for i in found)


def _reading_error(monitor: Monitor, state: State) -> Array | None:
    """(ns,) K by which left-out thermocouples read off: the loops still follow them."""
    if state.causes is None or state.picture is None:
        return None
    ignored = left_out(state.causes.settled, monitor.quiet)
    if not ignored:
        return None
    error = state.heard.degC - monitor.quiet.H @ state.picture.belief.mean
    mine = np.isin(np.arange(error.size), list(ignored)) & np.isfinite(error)
    return np.where(mine, error, 0.0)


def _look(monitor: Monitor, state: State) -> State:
    """Explain what does not fit, and carry every credible explanation over the horizon."""
    assert state.picture is not None
    causes, p_none, times = state.causes, 1.0, horizon_times(monitor.forecast)
    views: tuple[View, ...] = ()
    if monitor.causes is not None and causes is not None:
        causes = layer.explain(monitor.causes, causes, state.picture, times)
        causes, picture = layer.settle(monitor.causes, causes, state.picture)
        state = replace(state, picture=picture)
        views, p_none = causes.views, causes.p_none
    assert state.picture is not None
    start = loop_start(monitor.loops, monitor.recipes, times, state.heard, state.integral)
    missed = _missed(state)
    error = _reading_error(monitor, state)
    ahead = look_ahead(monitor.means, state.picture, start, views, p_none, missed, error)
    question = verdicts.question(monitor.words, ahead.prospects)
    return replace(state, causes=causes, ahead=ahead, question=question)


def _missed(state: State) -> Array | None:
    """(cells,) K beyond the modes that settled causes have left."""
    if state.causes is None or state.picture is None:
        return None
    return missed_now(state.causes.settled, state.picture.at_us)


def _settled(state: State) -> tuple[Prospect, ...]:
    """Causes that are part of the picture by now: they still hold."""
    settled = () if state.causes is None else state.causes.settled
    return tuple(Prospect(each.view, 1.0, {}, {}, {}) for each in settled)


def _causes(monitor: Monitor, state: State, tick: Tick) -> tuple[State, tuple[CauseRow, ...]]:
    """Every credible cause, every 10 s and when the leading one changes."""
    if state.ahead is None or state.ahead.at_us != tick.at_us:
        return state, ()
    if tick.at_us - state.causes_us < CAUSES_EVERY_US:
        return state, ()
    rows = tuple(
        CauseRow(tick.at_us, p.name, p.subjects, p.probability)
        for p in (*state.ahead.prospects, *_settled(state))
    )
    return replace(state, causes_us=tick.at_us), rows


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
    standing = frozenset(state.alarms)
    said = (*state.ahead.prospects, *_settled(state))
    found += verdicts.zone_alarms(words, said, standing)
    found += verdicts.sensor_alarms(words, said, standing)
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
    """One limit against the worst credible prospect."""
    assert state.ahead is not None
    prospects = state.ahead.prospects
    worst = worst_of(prospects, limit.name)
    ahead, (p, to_limit) = worst.ahead[limit.zone], worst.passing[limit.name]
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
        p_averaged=state.ahead.passing[limit.name][0],
        to_limit_s=to_limit,
        settled=state.settled,
        cause=_leading(worst, prospects),
        explanation=verdicts.explanation(monitor.words, prospects),
    )


def _leading(worst: Prospect, prospects: tuple[Prospect, ...]) -> str:
    return worst.name if worst is prospects[0] else f"{prospects[0].name}; worst: {worst.name}"


def _place(quiet: Quiet, cell: int) -> tuple[str, float, float]:
    """Zone and centre of a cell, mm."""
    grid = quiet.grid
    return quiet.cell_zone[cell], float(grid.x[cell] * 1e3), float(grid.y[cell] * 1e3)


def _shot(
    monitor: Monitor, state: State, tick: Tick, asked: bool
) -> tuple[State, FieldShot | None]:
    """The state itself, once a minute and at every alarm event."""
    if not asked and tick.at_us - state.shot_us < SHOT_EVERY_US:
        return state, None
    assert state.picture is not None
    shot = shot_of(monitor.quiet, state.picture, state.heard.duty)
    return replace(state, shot_us=tick.at_us), shot


def _powers(monitor: Monitor, state: State, tick: Tick) -> tuple[State, tuple[ZonePowerRow, ...]]:
    """Watts called for and delivered, by zone."""
    if tick.at_us - state.power_us < ZONE_POWER_EVERY_US:
        return state, ()
    assert state.picture is not None
    rows = power_rows(monitor.quiet, state.picture)
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
        cause=state.ahead.leading.name,
    )
