"""What goes into the record comes out of it again."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from platewatch.adapters.storage import Store, Written
from platewatch.errors import StorageError
from platewatch.types import (
    AlarmEvent,
    AlarmState,
    BatchEvent,
    Flag,
    Gap,
    LimitRow,
    Outcome,
    PeakRow,
    Reading,
    ZonePowerRow,
)

S = 1_000_000
PEAK = PeakRow(
    at_us=2 * S,
    now_degC=130.1,
    now_sd_K=0.7,
    now_x_mm=120.0,
    now_y_mm=80.5,
    now_zone="Z1",
    ahead_degC=139.6,
    ahead_sd_K=1.9,
    ahead_in_s=412.0,
    ahead_x_mm=130.0,
    ahead_y_mm=85.0,
    ahead_zone="Z2",
    limit_degC=135.0,
    p_over=0.81,
    to_limit_s=300.5,
    cause="cold load at 130, 85 mm",
)
ALARM = AlarmEvent(
    at_us=2 * S,
    alarm="peak-coming",
    subject="over-135",
    place="zone Z2",
    from_state=AlarmState.NORMAL,
    to_state=AlarmState.UNACKNOWLEDGED,
    priority="high",
    value=139.6,
    limit_value=135.0,
    cause="cold load, likely",
    message="hottest place passes 135 °C in 5 min",
    person="ann",
    reason="",
    group_no=3,
    limit_version=2,
)


@pytest.fixture
def store():
    with Store.open("sqlite://") as opened:
        yield opened


def test_a_reading_comes_back_bit_for_bit_with_flags_and_arrival(store: Store):
    """A replay makes its ticks from exactly these."""
    readings = [
        Reading(2 * S, "sensor/T1", 0.1 + 0.2, 3 * S, Flag.BACKLOG),
        Reading(2 * S, "zone/Z1/duty", 1 / 3, 3 * S, Flag.LATE | Flag.RETAINED),
    ]
    store.write("table", [], readings, {})
    assert list(store.read_readings("table")) == readings


def test_a_refused_value_that_is_no_number_is_kept_as_such(store: Store):
    """SQLite has no NaN; the row must still say that something arrived."""
    refused = Reading(S, "sensor/T1", math.nan, S, Flag.REFUSED)
    store.write("table", [], [refused, replace(refused, channel="sensor/T2", value=math.inf)], {})
    first, second = store.read_readings("table")
    assert math.isnan(first.value)
    assert second.value == math.inf
    assert first.flags == second.flags == Flag.REFUSED


def test_a_redelivered_reading_is_counted_and_the_first_one_kept(store: Store):
    """QoS 1 may deliver twice; rows stay exactly once."""
    first = Reading(S, "sensor/T1", 20.0, S)
    assert store.write("table", [], [first], {}) == Written(1, 0)
    again = [replace(first, value=99.0), Reading(2 * S, "sensor/T1", 21.0, 2 * S)]
    assert store.write("table", [], again, {}) == Written(1, 1)
    assert [r.value for r in store.read_readings("table")] == [20.0, 21.0]


def test_a_reading_twice_in_one_batch_is_one_row(store: Store):
    twice = [Reading(S, "sensor/T1", 20.0, S)] * 2
    assert store.write("table", [], twice, {}) == Written(1, 1)


@pytest.mark.parametrize("chunk", [1, 2, 7, 5000])
def test_readings_come_in_time_and_channel_order_whatever_the_chunk(store: Store, chunk: int):
    """(at_us, channel) by name, although numbers were given out in another order."""
    names = ["sensor/T9", "sensor/T1", "zone/Z1/duty", "sensor/T10"]
    for n in (3, 1, 2, 5, 4):
        store.write("table", [], [Reading(n * S, name, n, n) for name in names], {})
        store.write("other", [], [Reading(n * S, "sensor/T1", -1.0, n)], {})
    store.chunk = chunk
    found = [(r.at_us // S, r.channel) for r in store.read_readings("table")]
    assert found == [(n, name) for n in range(1, 6) for name in sorted(names)]


def test_a_time_range_includes_its_start_and_not_its_end(store: Store):
    """Two adjoining exports hold each row once."""
    store.write("table", [], [Reading(n * S, "sensor/T1", n, n) for n in range(6)], {})
    early = [r.value for r in store.read_readings("table", 1 * S, 3 * S)]
    late = [r.value for r in store.read_readings("table", 3 * S)]
    assert (early, late) == ([1, 2], [3, 4, 5])


def test_two_plates_with_the_same_sensor_names_stay_apart(store: Store):
    """One database may hold several plates."""
    store.write("a", [Outcome(S, peak=PEAK)], [Reading(S, "sensor/T1", 1.0, S)], {})
    store.write("b", [], [Reading(S, "sensor/T1", 2.0, S)], {})
    assert [r.value for r in store.read_readings("a")] == [1.0]
    assert [r.value for r in store.read_readings("b")] == [2.0]
    assert list(store.peaks("b")) == []
    assert store.plates() == ["a", "b"]


def test_a_changed_unit_leaves_the_meaning_of_older_readings(store: Store):
    """`reading.value` is as received: its unit must not change under it."""
    store.write("table", [], [Reading(S, "sensor/T1", 68.0, S)], {"sensor/T1": "degF"})
    store.write("table", [], [Reading(2 * S, "sensor/T1", 20.0, S)], {"sensor/T1": "degC"})
    rows = [(row.value, row.unit) for row in store.reading_rows("table")]
    assert rows == [(68.0, "degF"), (20.0, "degC")]
    assert store.units("table") == {"sensor/T1": "degC"}


def test_every_row_of_a_tick_comes_back_as_it_was(store: Store):
    """Peaks, powers, probabilities, alarms, gaps, notes and events, to the last bit."""
    power = ZonePowerRow(2 * S, "Z1", 300.0, 211.7, 12.5)
    limit = LimitRow(2 * S, "over-135", 0.81, (250.0, 300.5, None))
    outcome = Outcome(
        2 * S,
        peak=PEAK,
        zone_powers=(power,),
        limits=(limit,),
        alarm_events=(ALARM,),
        gaps=(Gap(S, 2 * S, "sensor/T4 silent"),),
        notes=("self-test passed",),
    )
    event = BatchEvent(2 * S, "load-on", '{"event": "load-on", "mass_kg": 4}')
    store.write("table", [outcome], [], {}, [event])
    assert list(store.peaks("table")) == [PEAK]
    assert list(store.zone_powers("table")) == [power]
    assert list(store.limit_probabilities("table")) == [limit]
    assert [row.event for row in store.alarm_events("table")] == [ALARM]
    assert store.gaps("table") == [Gap(S, 2 * S, "sensor/T4 silent")]
    assert [(n.at_us, n.person, n.text) for n in store.notes("table")] == [
        (2 * S, "", "self-test passed")
    ]
    assert list(store.events("table")) == [event]


def test_an_unknown_peak_is_stored_as_unknown(store: Store):
    """A blind plate has rows too, without inventing a temperature."""
    blind = replace(PEAK, now_degC=math.nan, ahead_degC=math.nan, limit_degC=None, p_over=None)
    store.write("table", [Outcome(2 * S, peak=blind)], [], {})
    (found,) = store.peaks("table")
    assert math.isnan(found.now_degC)
    assert math.isnan(found.ahead_degC)
    assert (found.limit_degC, found.p_over, found.now_x_mm) == (None, None, 120.0)


def test_numpy_numbers_are_stored_like_plain_ones(store: Store):
    """The core computes in numpy; the chain hash must not notice."""
    event = replace(ALARM, value=np.float64(139.6), group_no=np.int64(3))
    peak = replace(PEAK, now_degC=np.float64(130.1), p_over=np.float64(0.81))
    store.write("table", [Outcome(2 * S, peak=peak, alarm_events=(event,))], [], {})
    assert list(store.peaks("table")) == [PEAK]
    assert [row.event for row in store.alarm_events("table")] == [ALARM]
    assert store.verify().ok


def test_a_batch_event_delivered_twice_is_one_row(store: Store):
    event = BatchEvent(S, "start", "{}")
    store.write("table", [], [], {}, [event])
    store.write("table", [], [], {}, [event, BatchEvent(S, "end", "{}")])
    assert list(store.events("table")) == [event, BatchEvent(S, "end", "{}")]


def test_a_gap_that_goes_on_is_one_row_whose_end_moves(store: Store):
    """One outage is one gap on the shift report."""
    for end in (2, 3, 4):
        store.write("table", [Outcome(end * S, gaps=(Gap(S, end * S, "no data"),))], [], {})
    assert store.gaps("table") == [Gap(S, 4 * S, "no data")]


def test_a_batch_that_fails_in_its_middle_leaves_nothing(store: Store):
    """All or nothing: what is not stored is not acknowledged, and comes again."""
    bad = replace(PEAK, now_zone=None)
    readings = [Reading(S, "sensor/T1", 20.0, S)]
    with pytest.raises(StorageError):
        store.write("table", [Outcome(S, peak=bad, notes=("x",))], readings, {})
    assert list(store.read_readings("table")) == []
    assert store.notes() == []
    assert store.write("table", [], readings, {}) == Written(1, 0)
    assert [r.channel for r in store.read_readings("table")] == ["sensor/T1"]


def test_a_run_knows_its_version_description_and_last_tick(store: Store):
    """A replay closes a run where the live one stopped."""
    assert store.start_run("table", 7 * S, "0.1", "ab") == 1
    store.write("table", [Outcome(8 * S), Outcome(10 * S)], [], {})
    assert store.start_run("table", 90 * S, "0.2", "cd") == 2
    first, second = store.runs("table")
    assert (first.version, first.description_sha256, first.last_tick_us) == ("0.1", "ab", 10 * S)
    assert (second.started_us, second.last_tick_us) == (90 * S, None)


def test_a_description_that_does_not_match_its_hash_is_refused(store: Store):
    with pytest.raises(StorageError, match="does not match"):
        store.start_run("table", 1, "0.1", "ab", b"[plate]")
    assert store.runs("table") == []


def test_the_page_writes_an_action_and_the_daemon_sees_it_once(tmp_path: Path):
    """Actions reach a running daemon through the database, and nowhere else."""
    path = str(tmp_path / "a.sqlite")
    with Store.open(path) as page, Store.open(path) as daemon:
        first = page.act("table", 5 * S, "ann", "ack", "peak-coming", "over-135", "seen")
        page.act("other", 5 * S, "ann", "ack", "peak-coming", "over-135")
        (action,) = daemon.new_actions("table", 0)
        assert (action.seq, action.person, action.verb, action.reason) == (
            first,
            "ann",
            "ack",
            "seen",
        )
        assert daemon.new_actions("table", action.seq) == []


def test_an_action_no_tick_has_used_waits_for_the_next_start(store: Store):
    """With no daemon running it is applied at the next start; a replay knows the tick."""
    used = store.act("table", S, "ann", "ack", "peak-now", "over-135")
    waiting = store.act("table", 2 * S, "bo", "shelve", "sensor-bad", "T4", "being replaced")
    store.write("table", [Outcome(4 * S, applied=(used,))], [], {})
    assert [action.seq for action in store.unapplied_actions("table")] == [waiting]
    found = [(a.action.seq, a.applied_us) for a in store.actions("table")]
    assert found == [(used, 4 * S), (waiting, None)]
    assert store.verify().ok


def test_alarm_states_are_those_of_the_latest_event_of_each_instance(tmp_path: Path):
    """States, shelving and out-of-service come back after a restart."""
    acked = replace(ALARM, from_state=ALARM.to_state, to_state=AlarmState.ACKNOWLEDGED)
    gone = replace(acked, from_state=AlarmState.ACKNOWLEDGED, to_state=AlarmState.NORMAL)
    other = replace(ALARM, subject="over-150")
    with Store.open(str(tmp_path / "a.sqlite")) as store:
        store.write("table", [Outcome(S, alarm_events=(ALARM, other, acked))], [], {})
        store.write("second", [Outcome(S, alarm_events=(ALARM, gone))], [], {})
    with Store.open(str(tmp_path / "a.sqlite")) as store:
        assert store.alarm_states("table") == [other, acked]
        assert store.alarm_states("second") == [gone]
        assert [row.plate for row in store.alarm_list(None, open_only=True)] == ["table"] * 2
        assert [row.event for row in store.alarm_list(None, open_only=False)][-1] == gone


def test_an_alarm_state_of_unknown_name_is_reported_with_its_row(tmp_path: Path):
    """A tampered record gives one line, no traceback."""
    with Store.open(str(tmp_path / "a.sqlite")) as store:
        store.write("table", [Outcome(S, alarm_events=(ALARM,))], [], {})
        with store._writer.begin() as connection:
            connection.exec_driver_sql("UPDATE alarm_event SET to_state = 'fine'")
        with pytest.raises(StorageError, match=r"alarm_event row 1: .*platewatch verify"):
            store.alarm_states("table")


finite = st.floats(allow_nan=False)


@settings(max_examples=50, deadline=None)
@given(
    st.lists(
        st.tuples(st.integers(0, 20), st.sampled_from(["sensor/T1", "zone/Z1/duty"]), finite),
        max_size=40,
    )
)
def test_any_readings_stored_in_any_order_come_back_once_each(
    given_rows: list[tuple[int, str, float]],
):
    """Exactly-once rows: first value per (time, channel), sorted, duplicates counted."""
    readings = [Reading(at, name, value, at) for at, name, value in given_rows]
    first: dict[tuple[int, str], Reading] = {}
    for reading in readings:
        first.setdefault((reading.at_us, reading.channel), reading)
    with Store.open("sqlite://") as store:
        store.chunk = 3
        written = store.write("table", [], readings, {})
        assert written == Written(len(first), len(readings) - len(first))
        assert list(store.read_readings("table")) == [first[key] for key in sorted(first)]
