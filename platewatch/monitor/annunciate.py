"""Alarms as they stand: people's actions and conditions move them, each move is an event."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from platewatch.monitor.alarms import (
    ACTIVE,
    Alarm,
    Condition,
    Event,
    judge,
    next_state,
)
from platewatch.types import Action, AlarmEvent, AlarmState, Tick

Alarms = Mapping[tuple[str, str], Alarm]
BY_PERSON = {Event.ACKNOWLEDGE: "acknowledged", Event.RESET: "reset"}


def apply_actions(
    alarms: Alarms, tick: Tick
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
    asked = action.verb in {event.value for event in BY_PERSON}
    return asked and action.alarm == alarm and action.subject in ("", subject)


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
        message=f"{BY_PERSON[Event(action.verb)]} by {action.person}",
        person=action.person,
        reason=action.reason,
    )


def apply_conditions(
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
