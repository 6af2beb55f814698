"""Alarm states and their delays."""

import numpy as np
import pytest

from platewatch.monitor.alarms import (
    ACTIVE,
    TRANSITIONS,
    Alarm,
    Condition,
    Event,
    Verdict,
    judge,
    next_state,
)
from platewatch.types import AlarmState

N, U = AlarmState.NORMAL, AlarmState.UNACKNOWLEDGED
A, R = AlarmState.ACKNOWLEDGED, AlarmState.RETURNED_UNACKNOWLEDGED
RAISE, CLEAR, ACK = Event.RAISE, Event.CLEAR, Event.ACKNOWLEDGE
SECOND = 1_000_000

# The state diagram of ANSI/ISA-18.2-2016 and IEC 62682:2014, from memory; every cell.
CELLS = [
    (N, RAISE, U),
    (N, CLEAR, N),
    (N, ACK, N),
    (U, RAISE, U),
    (U, CLEAR, R),
    (U, ACK, A),
    (A, RAISE, A),
    (A, CLEAR, N),
    (A, ACK, A),
    (R, RAISE, U),
    (R, CLEAR, R),
    (R, ACK, N),
]


@pytest.mark.parametrize(("state", "event", "after"), CELLS)
def test_every_cell_of_the_state_table_is_that_of_the_standard(state, event, after):
    """ANSI/ISA-18.2, IEC 62682: normal, unacknowledged, acknowledged, returned."""
    assert next_state(state, event) is after


def test_no_state_can_be_left_by_a_way_that_the_standard_does_not_know():
    """Raise, clear and acknowledge in the four basic states: every entry of the table is one
    of the cells above."""
    cells = {(state, event): after for state, event, after in CELLS}
    basic = {key: after for key, after in TRANSITIONS.items() if key in cells}
    assert basic == {key: after for key, after in cells.items() if after is not key[0]}


def test_a_cleared_alarm_stays_listed_until_acknowledged():
    """A zone that was hot while nobody looked is still shown (ISA-18.2)."""
    state = next_state(next_state(N, RAISE), CLEAR)
    assert state is R
    assert next_state(state, ACK) is N


def test_no_sequence_of_events_loses_an_unacknowledged_alarm():
    """Raised and never acknowledged, an alarm is never normal, whatever comes and goes."""
    rng = np.random.default_rng(0)
    state = next_state(N, RAISE)
    for event in rng.choice([RAISE, CLEAR], 500):
        state = next_state(state, Event(event))
        assert state in (U, R)


def condition(verdict, on_s=10.0, off_s=30.0):
    return Condition(
        "peak-now",
        "product",
        verdict,
        "high",
        "zone L",
        "text",
        on_delay_us=round(on_s * SECOND),
        off_delay_us=round(off_s * SECOND),
    )


def judged(verdicts, alarm=None, every_s=2.0, **delays):
    """States after each verdict in turn."""
    alarm, states = alarm or Alarm(), []
    for i, verdict in enumerate(verdicts):
        alarm = judge(alarm, condition(verdict, **delays), round(i * every_s * SECOND))
        states.append(alarm.state)
    return states


def test_an_alarm_waits_for_its_on_delay():
    """On-delay 10 s: not at 8 s, at 10 s."""
    states = judged([Verdict.ON] * 7)
    assert states[:5] == [N] * 5
    assert states[5] is U


def test_a_dip_begins_the_on_delay_anew():
    """Only a condition that holds all the time counts."""
    on = [Verdict.ON] * 4
    assert judged([*on, Verdict.OFF, *on, Verdict.BETWEEN, *on])[-1] is N


def test_an_alarm_returns_only_after_its_off_delay():
    """Off-delay 30 s: not at 28 s, at 30 s."""
    states = judged([Verdict.OFF] * 16, Alarm(A))
    assert states[:15] == [A] * 15
    assert states[15] is N


def test_inside_the_deadband_nothing_moves():
    """Neither raised nor cleared while the value is between."""
    assert judged([Verdict.BETWEEN] * 50)[-1] is N
    assert judged([Verdict.BETWEEN] * 50, Alarm(U))[-1] is U


def test_an_alarm_that_returned_unacknowledged_can_come_again():
    """Re-alarm: raised anew from returned-unacknowledged, after the on-delay."""
    states = judged([Verdict.ON] * 6, Alarm(R))
    assert states[4] is R
    assert states[5] is U


def test_without_delays_an_alarm_moves_at_once():
    """Delay zero means this very tick."""
    assert judged([Verdict.ON, Verdict.OFF], on_s=0.0, off_s=0.0) == [U, R]


def test_acknowledged_or_not_an_alarm_is_active_while_its_condition_lasts():
    """Returned alarms are listed but no longer active."""
    assert {U, A} == ACTIVE


@pytest.mark.parametrize("times", [1.0, 3.0])
def test_noise_around_an_alarm_limit_does_not_make_it_chatter(times):
    """A value that sits at the limit with a noise of 0.5 K, and three times that, through a
    deadband of 2 K and delays of 10 and 30 s: never three annunciations in 60 s (EEMUA 191 /
    ISA-18.2 chattering, from memory)."""
    rng = np.random.default_rng(1)
    value = 135.0 + 0.5 * times * rng.standard_normal(1800)
    alarm, raised = Alarm(), []
    for i, v in enumerate(value):
        verdict = Verdict.ON if v > 135.0 else Verdict.OFF if v < 133.0 else Verdict.BETWEEN
        before, alarm = alarm, judge(alarm, condition(verdict), round(i * 2 * SECOND))
        if alarm.state is U and before.state is not U:
            raised.append(2 * i)
    assert all(c - a > 60 for a, c in zip(raised, raised[2:], strict=False))
    assert len(raised) <= 2
