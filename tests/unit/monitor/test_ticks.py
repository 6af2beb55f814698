"""When ticks close, and what is in them."""

from __future__ import annotations

from dataclasses import replace

import pytest

from platewatch.monitor.ticks import GAP_US, GRACE_US, Ticker
from platewatch.types import Action, BatchEvent, Flag, Reading, Tick

S = 1_000_000
TICK, LATE = 2 * S, 2 * S
START = 1_000_000 * TICK  # a tick


def reading(at_s: float, channel: str = "sensor/T1", value: float = 1.0, **more: int) -> Reading:
    at_us = START + round(at_s * S)
    return Reading(at_us, channel, value, at_us, Flag(more.get("flags", 0)))


def stands(ticks: list[Tick]) -> list[float]:
    return [(tick.at_us - START) / S for tick in ticks]


def lengths(ticks: list[Tick]) -> list[float]:
    return [tick.dt_us / S for tick in ticks]


def running(*stamps: float) -> Ticker:
    """A ticker whose ticks before the last stamp are closed."""
    ticker = Ticker(TICK, LATE)
    for at_s in stamps:
        ticker.add(reading(at_s))
    ticker.close()
    return ticker


def test_a_tick_holds_the_readings_after_the_one_before_up_to_its_own_time() -> None:
    """Tick n uses the stamps in (n - 1, n], ordered by (at_us, channel)."""
    ticker = Ticker(TICK, LATE)
    for at_s, name in ((2, "T2"), (0.5, "T1"), (2, "T1"), (2.000001, "T1"), (4, "T1"), (0, "T1")):
        ticker.add(reading(at_s, f"sensor/{name}"))
    ticks = ticker.finish()
    found = [[((r.at_us - START) / S, r.channel) for r in tick.readings] for tick in ticks]
    assert found == [
        [(0, "sensor/T1")],
        [(0.5, "sensor/T1"), (2, "sensor/T1"), (2, "sensor/T2")],
        [(2.000001, "sensor/T1"), (4, "sensor/T1")],
    ]


def test_a_tick_closes_when_the_newest_stamp_is_late_s_past_it() -> None:
    """A tick waits late_s of source time for stragglers, no longer and no shorter."""
    ticker = running(0)
    ticker.add(reading(1.999999))
    assert ticker.close() == []
    ticker.add(reading(2))
    assert stands(ticker.close()) == [0]


def test_a_reading_for_a_closed_tick_is_flagged_late_and_not_used() -> None:
    """A reading stamped up to the last closed tick is stored with the flag and not used."""
    ticker = running(0, 4.5)
    answer = ticker.add(reading(2, value=99.0))
    assert answer.flags == Flag.LATE
    assert not answer.usable
    assert ticker.late == 1
    used = [r.value for tick in ticker.finish() for r in tick.readings]
    assert used == [1.0]


def test_a_flag_of_the_record_is_obeyed() -> None:
    """A replay never decides again: refused, retained and late readings stay out."""
    ticker = Ticker(TICK, LATE)
    for at_s, flag in ((1, Flag.LATE), (3, Flag.REFUSED), (5, Flag.RETAINED), (90, Flag.LATE)):
        ticker.add(reading(at_s, flags=flag))
    assert ticker.finish() == []
    ticker.add(reading(7, flags=Flag.BACKLOG))
    (tick,) = ticker.finish()
    assert [r.flags for r in tick.readings] == [Flag.BACKLOG]


def test_the_second_reading_of_a_channel_at_one_stamp_is_a_duplicate() -> None:
    """The record keeps the first of (at_us, channel), so the tick uses the first."""
    ticker = Ticker(TICK, LATE)
    ticker.add(reading(1, value=100.0))
    answer = ticker.add(reading(1, value=200.0))
    assert answer.flags == Flag.MAYBE_DUPLICATE
    assert ticker.duplicates == 1
    assert [r.value for r in ticker.finish()[0].readings] == [100.0]


def test_the_first_tick_is_the_first_one_with_a_sensor_reading() -> None:
    """Duties and ambients alone start no picture; their last values join the first tick."""
    ticker = Ticker(TICK, LATE)
    for at_s, value in ((1, 0.1), (3, 0.2)):
        ticker.add(reading(at_s, "zone/Z1/duty", value))
    ticker.add(reading(21))
    ticks = ticker.finish()
    assert stands(ticks) == [22]
    assert [(r.channel, r.value) for r in ticks[0].readings] == [
        ("zone/Z1/duty", 0.2),
        ("sensor/T1", 1.0),
    ]
    assert ticks[0].dt_us == TICK


def test_a_silent_bus_closes_ticks_by_the_clock() -> None:
    """When the bus is silent the ticks go on, so that the plate is seen to be blind."""
    ticker = running(0)
    assert ticker.close(now_us=0) == []
    assert stands(ticker.close(now_us=6 * S)) == [0, 2, 4]


def test_a_source_clock_an_hour_behind_makes_nothing_late() -> None:
    """Only the time since the newest reading counts, not how the two clocks differ."""
    ticker = Ticker(TICK, LATE)
    late = []
    for n in range(20):
        answer = ticker.add(reading(2 * n - 3600))
        late.append(answer.flags)
        ticker.close(now_us=START + 2 * n * S + S)
    assert set(late) == {Flag.NONE}


def test_after_ten_minutes_of_silence_the_clock_makes_no_more_ticks() -> None:
    """One by one up to 600 s after the last reading's tick, then they wait."""
    ticker = running(0)
    ticker.close(now_us=0)
    ticks = ticker.close(now_us=5_000 * S)
    assert stands(ticks) == [2.0 * n for n in range(301)]
    assert ticker.close(now_us=9_000 * S) == []


@pytest.mark.parametrize("by_clock", [True, False])
def test_a_long_hole_ends_in_one_tick_up_to_the_new_data(by_clock: bool) -> None:
    """After 600 s one tick spans the rest, in a live run and in a replay alike."""
    ticker = running(0)
    ticks = []
    if by_clock:
        for now_s in (0, 100, 650, 800):
            ticks += ticker.close(now_us=now_s * S)
    ticker.add(reading(4000))
    ticks += ticker.close()
    ticks += ticker.finish()
    assert stands(ticks) == [2.0 * n for n in range(301)] + [3998, 4000]
    assert lengths(ticks) == [2.0] * 301 + [3398, 2]
    assert GAP_US == 600 * S


def test_a_hole_of_just_ten_minutes_needs_no_spanning_tick() -> None:
    """The tick after the last single one holds the data: nothing is left to span."""
    ticker = running(0)
    ticker.add(reading(602))
    assert set(lengths(ticker.finish())) == {2.0}


def test_a_backlog_finds_its_ticks_open_while_the_bus_is_known_to_be_down() -> None:
    """Backlog after an outage runs through the same ticks."""
    ticker = running(0)
    ticker.close(now_us=1 * S)
    for now_s in range(2, 361):
        ticker.hold(now_s * S)
    assert ticker.close(now_us=361 * S) == []
    flags = {ticker.add(reading(2 * n, flags=Flag.BACKLOG)).flags for n in range(1, 181)}
    assert flags == {Flag.BACKLOG}
    ticks = ticker.close(now_us=362 * S)
    assert stands(ticks) == [2.0 * n for n in range(180)]
    assert [tick.backlog for tick in ticks] == [False] + [True] * 179


def test_when_no_backlog_comes_the_clock_takes_over_after_a_grace() -> None:
    """A bus that is back but silent is blind again, not frozen at the outage."""
    ticker = running(0)
    ticker.close(now_us=0)
    ticker.hold(100 * S)
    assert ticker.close(now_us=100 * S + GRACE_US - 1) == []
    assert stands(ticker.close(now_us=100 * S + GRACE_US))[-1] == 108


def test_one_live_sensor_makes_a_tick_live() -> None:
    """A single late gateway must not turn the picture into history and silence alarms."""
    ticker = Ticker(TICK, LATE)
    ticker.add(reading(1, "sensor/T1", flags=Flag.BACKLOG))
    ticker.add(reading(1, "sensor/T2"))
    assert not ticker.finish()[0].backlog


def test_actions_act_in_the_next_tick_that_closes() -> None:
    """What a person asked for is applied once, in the order written down."""
    ticker = running(0)
    ticker.attach_actions([Action(8, 0, "late shift", "ack", "peak-now", "product")])
    ticker.attach_actions([Action(7, 0, "late shift", "note", "", "")])
    ticker.add(reading(4))
    ticks = ticker.close()
    assert [[a.seq for a in tick.actions] for tick in ticks] == [[7, 8], []]


def test_a_replay_applies_an_action_in_the_tick_of_the_record() -> None:
    """The record says in which tick it was applied; a replay obeys."""
    ticker = running(0)
    ticker.attach_actions([Action(1, 0, "late shift", "ack", "peak-now", "x")], START + 4 * S)
    ticker.add(reading(8))
    applied = {tick.at_us: tick.actions for tick in ticker.finish() if tick.actions}
    assert list(applied) == [START + 4 * S]


def test_a_batch_event_belongs_to_the_tick_of_its_stamp() -> None:
    """Batch events are evidence at their own time."""
    ticker = running(0)
    ticker.add_event(BatchEvent(START + 3 * S, "load-on"))
    ticker.add(reading(8))
    found = [tick.at_us for tick in ticker.finish() if tick.events]
    assert found == [START + 4 * S]


def test_a_late_batch_event_acts_from_now_on_in_live_and_in_replay() -> None:
    """It is stamped anew just after the last closed tick, and that is what is stored."""
    live = running(0, 8)
    stored = live.add_event(BatchEvent(START + 3 * S, "load-on"))
    assert stored.at_us == START + 6 * S + 1
    again = running(0)
    again.add_event(stored)
    again.add(reading(8))
    assert [t.at_us for t in live.finish() if t.events] == [
        t.at_us for t in again.finish() if t.events
    ]


def test_a_new_run_does_not_use_what_the_one_before_closed() -> None:
    """After a restart the last closed tick of the earlier run still bounds what is late."""
    ticker = Ticker(TICK, LATE, closed_us=START + 10 * S)
    assert ticker.add(reading(9)).flags == Flag.LATE
    ticker.add(reading(11))
    assert stands(ticker.finish()) == [12]


def test_an_hour_of_readings_without_sensors_keeps_one_value_a_channel() -> None:
    """Memory stays flat while a plate waits for its first thermocouple."""
    ticker = Ticker(TICK, LATE)
    for n in range(1800):
        ticker.add(reading(2 * n, "zone/Z1/duty"))
        ticker.close()
    ticker.add(reading(3601))
    found = [r.channel for r in ticker.finish()[0].readings]
    assert found == ["zone/Z1/duty", "sensor/T1"]


@pytest.mark.parametrize("wrong", [(0, 1, {}), (1, -1, {}), (1, 1, {"gap_us": -1})])
def test_impossible_times_are_refused(wrong: tuple[int, int, dict[str, int]]) -> None:
    """A tick has a length; waiting is never negative."""
    tick_us, late_us, more = wrong
    with pytest.raises(ValueError, match="must be positive"):
        Ticker(tick_us, late_us, **more)


def seen(at_s: float, name: str, ahead_s: float = 0.0) -> Reading:
    """A reading that arrives at `at_s`, stamped by a clock that is ahead."""
    at_us = START + round(at_s * S)
    return Reading(at_us + round(ahead_s * S), f"sensor/{name}", 1.0, at_us)


def test_one_source_that_is_ahead_closes_no_tick_before_the_others_were_heard() -> None:
    """A clock up to 120 s ahead is within bounds; the other thermocouples must not be late."""
    ticker = Ticker(TICK, LATE)
    for n in range(120):
        ticker.add(seen(n + 0.1, "T9", ahead_s=90))
        for name in ("T1", "T2", "T3"):
            ticker.add(seen(n + 0.2, name))
        ticker.close(now_us=START + n * S)
    assert ticker.late == 0
    assert ticker.closed_us is not None
    assert 112 <= (ticker.closed_us - START) / S <= 120


def test_the_reading_of_a_source_that_is_ahead_is_used_in_its_own_tick() -> None:
    """It is no backlog and not late: its tick has simply not come yet."""
    ticker = Ticker(TICK, LATE)
    used = set()
    for n in range(60):
        ticker.add(seen(n, "T9", ahead_s=20))
        for name in ("T1", "T2"):
            ticker.add(seen(n, name))
        for tick in ticker.close(now_us=START + n * S):
            used |= {(r.at_us - START) // S for r in tick.readings if r.channel == "sensor/T9"}
    assert used >= set(range(20, 56))


def test_duties_that_are_ahead_close_nothing_while_thermocouples_speak() -> None:
    """The controller's clock may be off; only thermocouples say how far time has come."""
    ticker = running(0)
    for n in range(1, 30):
        ticker.add(replace(seen(n, "", ahead_s=100), channel="zone/Z1/duty"))
        assert ticker.add(reading(n)).flags == Flag.NONE
        ticker.close()
    assert ticker.late == 0


def test_when_most_sensors_fall_silent_the_clock_takes_over() -> None:
    """Five of nine lost with their gateway: the other four are used as they come."""
    ticker = Ticker(TICK, LATE)
    used = 0
    for n in range(40):
        for k in range(9 if n < 10 else 4):
            ticker.add(seen(n, f"T{k}"))
        used += sum(len(t.readings) for t in ticker.close(now_us=START + n * S))
    assert ticker.late == 0
    assert used >= 9 * 10 + 4 * 24


def test_an_orderly_stop_leaves_what_is_stamped_ahead_to_the_next_run() -> None:
    """Else every other thermocouple would be late for the first minutes of the next run."""
    ticker = running(0)
    for n in range(1, 10):
        for name in ("T1", "T2"):
            ticker.add(seen(n, name))
        ticker.add(seen(n, "T9", ahead_s=90))
    assert stands(ticker.finish_live())[-1] == 10
    assert ticker.closed_us == START + 10 * S
