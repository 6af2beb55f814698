"""Silences and the record's own state as the estimator sees them, live and in a replay."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from platewatch.compose import Monitor, build_monitor, describe
from platewatch.session import Keeping, RecordState, Session, record_event
from platewatch.types import FILLED, BatchEvent, Flag, Gap, Outcome, Reading

S = 1_000_000
START = 900_000_000 * S
PREHEATER = Path(__file__).resolve().parents[2] / "config" / "preheater.toml"


@pytest.fixture(scope="module")
def monitor() -> Monitor:
    return build_monitor(describe(PREHEATER), causes=False)


def take(session: Session, seconds: range, flags: Flag = Flag.NONE) -> None:
    for second in seconds:
        for name in ("P1", "P2", "P3"):
            at_us = START + second * S
            session.take(Reading(at_us, f"sensor/{name}", 60.0, at_us, flags))


def gaps(outcomes: list[Outcome]) -> set[Gap]:
    return {gap for outcome in outcomes for gap in outcome.gaps}


def ended(gap: Gap) -> tuple[int, int, str]:
    return (gap.from_us - START) // S, (gap.to_us - START) // S, gap.what


def raised(outcomes: list[Outcome]) -> list[tuple[str, str, str]]:
    events = [event for outcome in outcomes for event in outcome.alarm_events]
    return [(e.alarm, e.subject, e.priority) for e in events if e.to_state == "unacknowledged"]


def test_a_gap_is_one_row_whose_end_moves_until_readings_come_again(monitor: Monitor) -> None:
    """Known while it lasts, not only afterwards."""
    session = Session(monitor)
    take(session, range(0, 20, 2))
    take(session, range(60, 80, 2))
    found = sorted(ended(gap) for gap in gaps(session.finish()))
    assert {(from_s, what) for from_s, _, what in found} == {(18, "no usable reading")}
    assert found[-1][1] == 60


def test_a_gap_that_a_backlog_fills_says_so_up_to_where_the_backlog_ends(monitor: Monitor) -> None:
    """Job, batch 6: one gap, later marked as filled from the backlog."""
    session = Session(monitor)
    take(session, range(0, 20, 2))
    take(session, range(40, 80, 2), Flag.BACKLOG)
    take(session, range(80, 90, 2))
    last = [ended(gap) for outcome in session.finish() for gap in outcome.gaps][-1]
    assert last == (18, 78, FILLED)


def test_a_record_in_trouble_is_an_alarm_that_a_replay_raises_too(monitor: Monitor) -> None:
    """Low while only the record is in trouble, medium when readings are being lost."""
    stored: list[BatchEvent] = []
    live = Session(monitor)
    told: list[Outcome] = []
    for second in range(0, 300, 2):
        take(live, range(second, second + 1))
        told += live.close()
        state = {
            40: RecordState(Keeping.FAILING, True, 10.0, 0.1, "disk full"),
            80: RecordState(Keeping.LOSING, True, 0.0, 0.0, "disk full"),
            160: RecordState(),
        }.get(second)
        if state is not None:
            stored.append(live.take_event(record_event(state)))
    told += live.finish()
    assert raised(told) == [
        ("store-failing", "room", "low"),
        ("store-failing", "record", "low"),
        ("store-failing", "readings", "medium"),
    ]
    assert told[-1].alarm_events == ()
    states = {key: alarm.state for key, alarm in live.state.alarms.items()}
    assert set(states.values()) == {"returned_unacknowledged"}
    again = Session(monitor)
    take(again, range(0, 300, 2))
    for event in stored:
        again.take_event(event)
    assert [o.alarm_events for o in again.finish()] == [o.alarm_events for o in told]


def test_ticks_can_be_gone_through_a_few_at_a_time(monitor: Monitor) -> None:
    """A long backlog of one plate must not keep the others waiting."""
    session, whole = Session(monitor), Session(monitor)
    for each in (session, whole):
        take(each, range(0, 100, 2))
    parts: list[Outcome] = []
    while True:
        parts += session.close(most=7)
        if not session.is_behind:
            break
    assert [o.peak for o in parts] == [o.peak for o in whole.close()]


def test_an_estimator_that_fails_stops_neither_the_record_nor_the_alarms(monitor: Monitor) -> None:
    """Never silent: noted once, blind after 10 s; every tick still has its outcome."""
    broken = replace(monitor, draws=monitor.draws[:, :1])
    session = Session(broken)
    take(session, range(0, 40, 2))
    outcomes = session.finish()
    assert [(o.at_us - START) // S for o in outcomes] == list(range(0, 40, 2))
    assert sum(len(o.notes) for o in outcomes) == 1
    assert raised(outcomes) == [("picture-blind", "plate", "high")]
    assert session.state.alarms


def test_an_estimate_that_cannot_be_continued_is_begun_anew(monitor: Monitor) -> None:
    """The next tick has a picture again, made from its readings alone."""
    session = Session(monitor)
    take(session, range(0, 20, 2))
    session.finish()
    picture = session.state.picture
    assert picture is not None
    belief = replace(picture.belief, cov=np.full_like(picture.belief.cov, np.nan))
    session._state = replace(session.state, picture=replace(picture, belief=belief))
    take(session, range(20, 24, 2))
    outcomes = session.finish()
    assert [len(o.notes) for o in outcomes] == [1, 0]
    assert all(o.peak is not None and abs(o.peak.now_degC - 60.0) < 15.0 for o in outcomes)
