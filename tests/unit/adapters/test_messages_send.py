"""What platewatch says on the bus."""

from __future__ import annotations

import json
import math

from platewatch.adapters.messages_send import (
    alarm_message,
    alarm_topic,
    alive_message,
    encode,
    peak_message,
    topic_of,
)
from platewatch.types import AlarmEvent, AlarmState, CauseRow, PeakRow

AT = 1_772_352_000_000_000

ROW = PeakRow(
    at_us=AT,
    now_degC=123.4,
    now_sd_K=0.9,
    now_x_mm=490.0,
    now_y_mm=10.0,
    now_zone="Z2",
    ahead_degC=139.6,
    ahead_sd_K=2.5,
    ahead_in_s=640.0,
    ahead_x_mm=485.0,
    ahead_y_mm=12.0,
    ahead_zone="Z2",
    limit_degC=135.0,
    p_over=0.92,
    to_limit_s=460.0,
    cause="cold load",
)
EVENT = AlarmEvent(
    at_us=AT,
    alarm="peak-coming",
    subject="product",
    place="Z2",
    from_state=AlarmState.NORMAL,
    to_state=AlarmState.UNACKNOWLEDGED,
    priority="medium",
    value=139.6,
    limit_value=135.0,
    cause="cold load",
    message="about 640 s",
)


def test_the_peak_message_has_the_members_that_plants_read() -> None:
    """The contract of platewatch/<plate>/peak: names, nesting, units in the names."""
    said = json.loads(
        peak_message(ROW, 7, (300.0, 460.0, None), (CauseRow(0, "cold load", "Z2", 0.6),))
    )
    assert said == {
        "at": "2026-03-01T08:00:00Z",
        "run": 7,
        "now": {"degC": 123.4, "sd_K": 0.9, "x_mm": 490.0, "y_mm": 10.0, "zone": "Z2"},
        "ahead": {
            "degC": 139.6,
            "sd_K": 2.5,
            "x_mm": 485.0,
            "y_mm": 12.0,
            "zone": "Z2",
            "in_s": 640.0,
        },
        "alarm_limit_degC": 135.0,
        "p_over": 0.92,
        "to_limit_s": [300.0, 460.0, None],
        "causes": [{"name": "cold load", "place": "Z2", "probability": 0.6}],
        "inferred": True,
    }


def test_every_message_carries_its_time_and_run() -> None:
    """A reader treats anything older than 15 s as unknown, so `at` is always there."""
    for body in (alive_message("lost", AT, 3), alarm_message(EVENT, 3), peak_message(ROW, 3)):
        said = json.loads(body)
        assert (said["at"], said["run"]) == ("2026-03-01T08:00:00Z", 3)


def test_alarm_states_are_said_in_the_words_of_the_standard() -> None:
    """ISA-18.2 names, as stored."""
    said = json.loads(alarm_message(EVENT, 1))
    assert (said["was"], said["state"]) == ("normal", "unacknowledged")


def test_no_name_breaks_out_of_our_own_root() -> None:
    """A name with a slash or a wildcard stays one level below platewatch/<plate>."""
    assert alarm_topic("p1", EVENT) == "platewatch/p1/alarm/peak-coming/product"
    assert topic_of("p/1", "zone", "Z+#", "") == "platewatch/p_1/zone/Z__/_"


def test_what_is_not_finite_is_said_as_null() -> None:
    """JSON has no NaN; a strict reader must still be able to read us."""
    assert encode({"x": math.nan, "y": math.inf}) == b'{"x":null,"y":null}'
