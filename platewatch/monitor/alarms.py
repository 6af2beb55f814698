"""Alarm states of ANSI/ISA-18.2 and IEC 62682 as one transition table.

The condition of an alarm is judged elsewhere; here it only moves the state, after
its on-delay or off-delay, and a person's acknowledgement moves it too.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import StrEnum

from platewatch.types import AlarmState


class Event(StrEnum):
    RAISE = "raise"
    CLEAR = "clear"
    ACKNOWLEDGE = "ack"
    CLEAR_LATCHED = "clear latched"  # the condition cleared, but the alarm waits for a reset
    RESET = "reset"


TRANSITIONS: dict[tuple[AlarmState, Event], AlarmState] = {
    (AlarmState.NORMAL, Event.RAISE): AlarmState.UNACKNOWLEDGED,
    (AlarmState.UNACKNOWLEDGED, Event.ACKNOWLEDGE): AlarmState.ACKNOWLEDGED,
    (AlarmState.UNACKNOWLEDGED, Event.CLEAR): AlarmState.RETURNED_UNACKNOWLEDGED,
    (AlarmState.ACKNOWLEDGED, Event.CLEAR): AlarmState.NORMAL,
    (AlarmState.RETURNED_UNACKNOWLEDGED, Event.RAISE): AlarmState.UNACKNOWLEDGED,
    (AlarmState.RETURNED_UNACKNOWLEDGED, Event.ACKNOWLEDGE): AlarmState.NORMAL,
    (AlarmState.UNACKNOWLEDGED, Event.CLEAR_LATCHED): AlarmState.LATCHED_UNACKNOWLEDGED,
    (AlarmState.ACKNOWLEDGED, Event.CLEAR_LATCHED): AlarmState.LATCHED_ACKNOWLEDGED,
    (AlarmState.LATCHED_UNACKNOWLEDGED, Event.RAISE): AlarmState.UNACKNOWLEDGED,
    (AlarmState.LATCHED_UNACKNOWLEDGED, Event.ACKNOWLEDGE): AlarmState.LATCHED_ACKNOWLEDGED,
    (AlarmState.LATCHED_ACKNOWLEDGED, Event.RAISE): AlarmState.UNACKNOWLEDGED,
    (AlarmState.LATCHED_ACKNOWLEDGED, Event.RESET): AlarmState.NORMAL,
}

ACTIVE = frozenset({AlarmState.UNACKNOWLEDGED, AlarmState.ACKNOWLEDGED})


def next_state(state: AlarmState, event: Event) -> AlarmState:
    """The state after an event; an event that means nothing here changes nothing."""
    return TRANSITIONS.get((state, event), state)


class Verdict(StrEnum):
    """What the alarm's condition says at one instant."""

    ON = "on"
    OFF = "off"
    BETWEEN = "between"  # inside the deadband


@dataclass(frozen=True)
class Condition:
    """One alarm's condition at one tick, with what its message needs.

    subject: the limit, zone or sensor it is about
    """

    alarm: str
    subject: str
    verdict: Verdict
    priority: str
    place: str
    message: str
    value: float | None = None
    limit_value: float | None = None
    cause: str = ""
    on_delay_us: int = 0
    off_delay_us: int = 0
    latch: bool = False

    @property
    def key(self) -> tuple[str, str]:
        return self.alarm, self.subject


@dataclass(frozen=True)
class Alarm:
    """One alarm instance.

    since_us: since when the condition has been other than the state, None when it is not
    """

    state: AlarmState = AlarmState.NORMAL
    since_us: int | None = None


def judge(alarm: Alarm, condition: Condition, at_us: int) -> Alarm:
    """Move an alarm by its condition, after the delay that applies."""
    active = alarm.state in ACTIVE
    wanted = Verdict.OFF if active else Verdict.ON
    if condition.verdict is not wanted:
        return alarm if alarm.since_us is None else replace(alarm, since_us=None)
    since = at_us if alarm.since_us is None else alarm.since_us
    delay = condition.off_delay_us if active else condition.on_delay_us
    if at_us - since < delay:
        return replace(alarm, since_us=since)
    clear = Event.CLEAR_LATCHED if condition.latch else Event.CLEAR
    return Alarm(next_state(alarm.state, clear if active else Event.RAISE))
