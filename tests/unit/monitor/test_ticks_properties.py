"""Laws of the ticks: they follow from stamps and flags, never from the way of arrival."""

from __future__ import annotations

from itertools import pairwise

from hypothesis import given
from hypothesis import strategies as st

from platewatch.monitor.ticks import Ticker
from platewatch.types import Flag, Reading, Tick

TICK, LATE, GAP = 10, 15, 60
CHANNELS = ("sensor/T1", "sensor/T2", "zone/Z1/duty")

stamps = st.integers(0, 600)
keys = st.lists(st.tuples(stamps, st.sampled_from(CHANNELS)), min_size=1, max_size=40, unique=True)


def readings_of(found: list[tuple[int, str]]) -> list[Reading]:
    return [Reading(at, channel, float(i), at) for i, (at, channel) in enumerate(found)]


def ticks_of(readings: list[Reading], close_after: list[bool] | None = None) -> list[Tick]:
    ticker = Ticker(TICK, LATE, gap_us=GAP)
    ticks: list[Tick] = []
    for i, reading in enumerate(readings):
        assert ticker.add(reading) == reading
        if close_after is None or close_after[i % len(close_after)]:
            ticks += ticker.close()
    return ticks + ticker.finish()


@given(keys, st.data())
def test_any_order_of_arrival_within_late_s_gives_the_same_ticks(
    found: list[tuple[int, str]], data: st.DataObject
) -> None:
    """Ticks come from data and flags only: arrival order and chunking change nothing."""
    readings = readings_of(found)
    delays = data.draw(st.lists(st.integers(0, LATE - 1), min_size=len(found), max_size=len(found)))
    chunks = data.draw(st.lists(st.booleans(), min_size=1, max_size=8))
    arrival = sorted(range(len(found)), key=lambda i: found[i][0] + delays[i])
    in_order = sorted(readings, key=lambda r: (r.at_us, r.channel))
    assert ticks_of([readings[i] for i in arrival], chunks) == ticks_of(in_order)


@given(keys)
def test_every_reading_is_in_exactly_one_tick(found: list[tuple[int, str]]) -> None:
    """Nothing is lost: only inputs before the first sensor reading give way to newer ones."""
    readings = sorted(readings_of(found), key=lambda r: r.at_us)
    ticks = ticks_of(readings)
    used = [reading for tick in ticks for reading in tick.readings]
    assert len(used) == len(set(used))
    if not ticks:
        assert all(not r.channel.startswith("sensor/") for r in readings)
        return
    begin = ticks[0].at_us - TICK
    assert {r for r in readings if r.at_us > begin} <= set(used)
    left_out = set(readings) - set(used)
    for gone in left_out:
        assert any(u.channel == gone.channel and gone.at_us < u.at_us for u in used)


@given(keys)
def test_ticks_follow_each_other_without_hole_or_overlap(found: list[tuple[int, str]]) -> None:
    """Each tick begins where the one before ended, on the grid; a long one holds nothing."""
    ticks = ticks_of(sorted(readings_of(found), key=lambda r: r.at_us))
    for before, tick in pairwise(ticks):
        assert tick.at_us - tick.dt_us == before.at_us
        assert all(tick.at_us - tick.dt_us < r.at_us <= tick.at_us for r in tick.readings)
    for tick in ticks:
        assert tick.at_us % TICK == 0
        assert tick.dt_us == TICK or not tick.readings
        assert list(tick.readings) == sorted(tick.readings, key=lambda r: (r.at_us, r.channel))


arrivals = st.lists(
    st.tuples(
        stamps,
        st.sampled_from(CHANNELS),
        st.integers(0, 120),  # delay, often beyond what is waited for
        st.sampled_from([Flag.NONE, Flag.NONE, Flag.NONE, Flag.RETAINED, Flag.BACKLOG]),
    ),
    min_size=1,
    max_size=40,
)


@given(arrivals, st.lists(st.sampled_from(["clock", "held", "none"]), min_size=1, max_size=9))
def test_a_replay_of_the_record_makes_the_ticks_of_the_live_run(
    found: list[tuple[int, str, int, Flag]], calls: list[str]
) -> None:
    """Whatever the clock, an outage and late arrivals did live, the flags tell it all."""
    live = Ticker(TICK, LATE, gap_us=GAP, grace_us=20)
    record: dict[tuple[int, str], Reading] = {}
    ticks: list[Tick] = []
    found = sorted(found, key=lambda item: item[0] + item[2])
    for i, (at, channel, delay, flag) in enumerate(found):
        stored = live.add(Reading(at, channel, float(i), at + delay, flag))
        record.setdefault((at, channel), stored)  # as insert-or-ignore does
        call = calls[i % len(calls)]
        if call == "held":
            live.hold(at + delay)
        if call != "none":
            ticks += live.close(at + delay)
    ticks += live.close(found[-1][0] + found[-1][2] + 40)

    replay = Ticker(TICK, LATE, gap_us=GAP)
    again: list[Tick] = []
    for reading in sorted(record.values(), key=lambda r: (r.at_us, r.channel)):
        assert replay.add(reading).flags & ~Flag.LATE == reading.flags & ~Flag.LATE
        again += replay.close()
    again += replay.finish(until_us=live.closed_us)
    assert again == ticks


@given(keys, st.integers(1, 8))
def test_a_record_with_a_duplicate_of_everything_gives_the_same_ticks(
    found: list[tuple[int, str]], every: int
) -> None:
    """Redelivery is harmless: the second copy of a reading is set aside."""
    readings = sorted(readings_of(found), key=lambda r: (r.at_us, r.channel))
    ticker = Ticker(TICK, LATE, gap_us=GAP)
    ticks: list[Tick] = []
    for i, reading in enumerate(readings):
        ticker.add(reading)
        if i % every == 0:
            assert not ticker.add(reading).usable
        ticks += ticker.close()
    assert ticks + ticker.finish() == ticks_of(readings)
