"""Telling history from a clock that is off."""

from __future__ import annotations

from platewatch.arrival import Ages, ClockWatch
from platewatch.types import Flag, Reading

NOW_US = 1_772_352_000_000_000


def reading(age_s: float) -> Reading:
    seen_us = NOW_US
    return Reading(seen_us - round(age_s * 1e6), "sensor/T1", 120.0, seen_us)


def flags(ages: Ages, age_s: float) -> Flag:
    return ages.judge([reading(age_s)])[0].flags


def test_a_fresh_reading_is_live_and_an_old_one_is_backlog() -> None:
    """Design, section 4: anything older than 15 s is not what is now."""
    assert flags(Ages(), 2.0) is Flag.NONE
    assert flags(Ages(), 14.9) is Flag.NONE
    assert flags(Ages(), 15.1) is Flag.BACKLOG


def test_sources_whose_clock_is_off_by_a_steady_amount_are_live_again() -> None:
    """Otherwise a clock 90 s behind would switch every alarm off for good."""
    ages = Ages()
    for second in range(31):
        ages = ages.seen(90_000_000, float(second))
    assert ages.offset_us == 90_000_000
    assert flags(ages, 92.0) is Flag.NONE
    assert flags(ages, 110.0) is Flag.BACKLOG


def test_a_backlog_that_is_being_sent_never_counts_as_a_clock_that_is_off() -> None:
    """Its ages fall as it comes: ten minutes of it in a minute."""
    ages = Ages()
    for second in range(61):
        ages = ages.seen(round((600 - 10 * second) * 1e6), float(second))
        assert ages.offset_us == 0


def test_a_clock_that_was_put_right_is_believed_again() -> None:
    """The offset goes when the ages are small again for a while."""
    ages = Ages(offset_us=90_000_000)
    for second in range(31):
        ages = ages.seen(1_000_000, float(second))
    assert ages.offset_us == 0


def test_a_reading_keeps_the_flags_it_came_with() -> None:
    """A retained value that is old is both."""
    old = Reading(NOW_US - 60_000_000, "sensor/T1", 1.0, NOW_US, Flag.RETAINED)
    assert Ages().judge([old])[0].flags == Flag.RETAINED | Flag.BACKLOG


def test_a_computer_clock_that_is_set_is_noticed_once() -> None:
    """Job, batch 6: one clock note for a step of -90 s."""
    watch, step = ClockWatch().look(NOW_US, 100.0)
    assert step == 0
    watch, step = watch.look(NOW_US + 1_000_000 - 90_000_000, 101.0)
    assert step == -90_000_000
    watch, step = watch.look(NOW_US + 2_000_000 - 90_000_000, 102.0)
    assert step == 0


def test_a_computer_clock_that_drifts_is_left_alone() -> None:
    """A second a day is no step."""
    watch, _ = ClockWatch().look(NOW_US, 0.0)
    for second in range(1, 2000):
        watch, step = watch.look(NOW_US + second * 1_000_012, float(second))
        assert step == 0
