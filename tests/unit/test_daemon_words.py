"""The daemon's log: plain words, one event a line, no flood."""

from __future__ import annotations

import io
import json
import logging
from dataclasses import replace

from platewatch.daemon_words import Repeats, alarm_line, gap_line, open_log
from platewatch.types import AlarmEvent, AlarmState, Gap

EVENT = AlarmEvent(
    at_us=0,
    alarm="peak-coming",
    subject="product",
    place="zone Z5",
    from_state=AlarmState.NORMAL,
    to_state=AlarmState.UNACKNOWLEDGED,
    priority="medium",
    value=138.0,
    limit_value=135.0,
    cause="",
    message="Peak of 138 °C is coming.",
)


def test_an_alarm_is_told_loudly_with_priority_and_message() -> None:
    """What stands in the journal is what the operator was told."""
    level, text = alarm_line(EVENT)
    assert level == logging.WARNING
    assert text == "ALARM MEDIUM peak-coming product: Peak of 138 °C is coming."


def test_every_other_state_is_told_calmly() -> None:
    """Only an annunciation is a warning."""
    for state in set(AlarmState) - {AlarmState.UNACKNOWLEDGED}:
        level, text = alarm_line(replace(EVENT, to_state=state, person="late shift"))
        assert level == logging.INFO
        assert "peak-coming product" in text


def test_the_same_trouble_is_told_once_a_minute_with_its_count() -> None:
    """Rate limit: at once, then after a minute with how many there were."""
    repeats = Repeats()
    told = [repeats.due("nan", second / 10) for second in range(1300)]
    assert [(i, n) for i, n in enumerate(told) if n] == [(0, 1), (600, 600), (1200, 600)]


def test_different_troubles_do_not_hide_each_other() -> None:
    """Each reason has its own minute."""
    repeats = Repeats()
    assert repeats.due("nan", 0.0) == 1
    assert repeats.due("unknown channel", 0.0) == 1


def test_a_gap_is_told_with_its_length() -> None:
    """From, to and how long."""
    assert gap_line(Gap(0, 36_000_000, "no usable reading")).startswith("gap of 36 s from 1970")


def test_the_log_can_be_read_by_a_machine() -> None:
    """--json-log: one object a line."""
    stream = io.StringIO()
    log = open_log(True, stream)
    logging.LoggerAdapter(log, {"plate": "p1"}).warning("lost: %s", "broker")
    told = json.loads(stream.getvalue())
    assert (told["level"], told["plate"], told["text"]) == ("warning", "p1", "lost: broker")
    assert told["at"].endswith("Z")
