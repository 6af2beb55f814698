"""Telling history from a clock that is off."""

from __future__ import annotations

import pytest

from platewatch.arrival import Ages, ArrivalClock, ClockWatch, Skew, SourceClocks
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


class SetClock:
    """A computer whose clock a test sets."""

    def __init__(self) -> None:
        self.at_s, self.utc_off_us = 100.0, 0

    def monotonic(self) -> float:
        return self.at_s

    def utc_us(self) -> int:
        return NOW_US + round(self.at_s * 1e6) + self.utc_off_us


@pytest.mark.parametrize("step_s", [-90, 90, -7200])
def test_arrival_times_ride_out_a_step_of_the_computers_clock(step_s: int) -> None:
    """Job, M12: values without a source time stay in order; the step is told once."""
    clock = SetClock()
    arrival = ArrivalClock(clock)
    before_us = arrival.utc_us()
    clock.at_s += 1
    clock.utc_off_us += step_s * 1_000_000
    assert arrival.look() == step_s * 1_000_000
    assert arrival.look() == 0
    assert arrival.utc_us() == before_us + 1_000_000


def test_a_clock_that_was_hours_behind_is_followed_forward() -> None:
    """A computer that started before its clock was right; order is kept going forward."""
    clock = SetClock()
    arrival = ArrivalClock(clock)
    clock.utc_off_us += 3 * 3_600_000_000
    assert arrival.look() == 3 * 3_600_000_000
    assert arrival.utc_us() == clock.utc_us()


def test_a_start_after_the_clock_was_set_back_goes_on_from_the_record() -> None:
    """Else values without a source time would be late until the clock has caught up."""
    clock = SetClock()
    arrival = ArrivalClock(clock, clock.utc_us() + 90_000_000)
    assert arrival.ahead_us == 90_000_000
    assert arrival.utc_us() == clock.utc_us() + 90_000_000


def sample(second: float, ages_s: dict[str, float]) -> list[Reading]:
    seen_us = NOW_US + round(second * 1e6)
    return [
        Reading(seen_us - round(age * 1e6), f"sensor/{name}", 120.0, seen_us)
        for name, age in ages_s.items()
    ]


def heard(clocks: SourceClocks, ages_s: dict[str, float], first: int, last: int) -> list[Skew]:
    found = []
    for second in range(first, last):
        found += clocks.hear(sample(second, ages_s), float(second))
    return found


def test_one_source_that_is_ahead_does_not_make_the_others_history() -> None:
    """A clock 90 s ahead is told once and by name; every other reading stays live."""
    clocks = SourceClocks()
    ages = {"T1": 0.1, "T2": 0.1, "T3": 0.2, "T9": -90.0}
    assert heard(clocks, ages, 0, 200) == [Skew(90_000_000, "the clock of sensor/T9 is off")]
    flags = {r.channel: r.flags for r in clocks.judge(sample(200, ages))}
    assert set(flags.values()) == {Flag.NONE}


def test_sources_that_are_all_off_are_one_note() -> None:
    """The common offset is told, not every channel of it."""
    found = heard(SourceClocks(), {"T1": 45.0, "T2": 45.1, "T3": 45.2}, 0, 100)
    told = [(round(skew.offset_us / 1e6), skew.what) for skew in found]
    assert told == [(-45, "the sources' clock is off")]


def test_source_time_that_goes_back_is_told_once_with_its_step() -> None:
    """Backward stamps in step with time: the gateway's clock was set back by 45 s."""
    clocks = SourceClocks()
    assert heard(clocks, {"T1": 0.0}, 0, 60) == []
    found = heard(clocks, {"T1": 45.0}, 60, 80)
    assert [skew.what for skew in found] == ["source time of sensor/T1 went back"]
    assert -45_000_000 <= found[0].offset_us <= -40_000_000


def test_a_backlog_is_no_clock_that_went_back() -> None:
    """A gateway that sends old samples beside new ones sends them faster than time."""
    clocks = SourceClocks()
    heard(clocks, {"T1": 0.0}, 0, 60)
    found = []
    for n in range(60):
        found += clocks.hear(sample(60 + n / 50, {"T1": 600.0 - 10 * n}), 60 + n / 50)
    assert found == []
