"""Retention and backup: the record grows no further than told, and copies are whole."""

from __future__ import annotations

import sqlite3
import threading
from contextlib import closing
from pathlib import Path

import numpy as np
import pytest

from platewatch.adapters import storage_tidy
from platewatch.adapters.storage import Store
from platewatch.errors import StorageError
from platewatch.types import AlarmEvent, AlarmState, FieldShot, Outcome, Reading, ZonePowerRow

DAY = 86_400_000_000
N, U = AlarmState.NORMAL, AlarmState.UNACKNOWLEDGED


def alarm(day: int, subject: str, to_state: AlarmState) -> AlarmEvent:
    was = U if to_state is N else N
    return AlarmEvent(
        day * DAY, "sensor-bad", subject, "", was, to_state, "low", None, None, "", "look at it"
    )


def fill(store: Store, days: range) -> None:
    for day in days:
        readings = [Reading(day * DAY + n, "sensor/T1", n, n) for n in range(50)]
        shot = FieldShot(day * DAY, "b", np.zeros(3), np.eye(3), np.zeros(1))
        power = ZonePowerRow(day * DAY, "Z1", 1.0, 1.0, 1.0)
        store.write("table", [Outcome(day * DAY, zone_powers=(power,), shot=shot)], readings, {})


def days_of(rows) -> list[int]:
    return sorted({row.at_us // DAY for row in rows})


@pytest.mark.parametrize("rows", [1, 7, 50, 10_000])
def test_old_readings_go_and_young_ones_stay(rows: int, monkeypatch: pytest.MonkeyPatch):
    """Readings 90 days by default; in chunks of any size."""
    monkeypatch.setattr(storage_tidy, "_ROWS", rows)
    with Store.open("sqlite://") as store:
        fill(store, range(0, 100, 10))
        done = store.tidy(now_us=100 * DAY, reading_days=60)
        assert days_of(store.read_readings("table")) == [40, 50, 60, 70, 80, 90]
        assert days_of(store.zone_powers("table")) == [40, 50, 60, 70, 80, 90]
        assert done.rows["reading"] == 4 * 50
        assert store.tidy(now_us=100 * DAY, reading_days=60).rows == {}


def test_the_last_shot_of_a_plate_outlives_its_keeping_time():
    """A plate that stood for a year restarts from its own last state."""
    with Store.open("sqlite://") as store:
        fill(store, range(3))
        store.tidy(now_us=1000 * DAY)
        last = store.last_shot("table")
        assert last is not None
        assert last.at_us == 2 * DAY
        assert store.shot_before("table", DAY) is None


def test_a_removal_is_written_into_the_log_book():
    """An auditor sees that rows are missing because they were due."""
    with Store.open("sqlite://") as store:
        fill(store, range(2))
        store.tidy(now_us=1000 * DAY)
        told = [note.text for note in store.notes()]
        assert told[0] == (
            'removed by retention: {"table": "reading", "before_us": 78624000000000, "rows": 100}'
        )
        assert len(told) == 3


def test_the_alarm_chain_stays_whole_after_retention():
    """verify starts at the row after the one named in the log book."""
    with Store.open("sqlite://") as store:
        for day in range(10):
            events = (alarm(day, "T1", U), alarm(day, "T1", N))
            store.write("table", [Outcome(day * DAY, alarm_events=events)], [], {})
        store.tidy(now_us=400 * DAY + 5 * DAY, keep_days=400)
        assert [row.seq for row in store.alarm_events("table")] == list(range(11, 21))
        assert store.verify().findings == ()
        store.write("table", [Outcome(DAY, alarm_events=(alarm(11, "T1", U),))], [], {})
        store.tidy(now_us=400 * DAY + 8 * DAY, keep_days=400)
        assert [row.seq for row in store.alarm_events("table")] == [17, 18, 19, 20, 21]
        assert store.verify().findings == ()


def test_removing_more_than_the_log_book_says_is_found():
    """Retention is no cover for removing rows."""
    with Store.open("sqlite://") as store:
        for day in range(10):
            events = (alarm(day, "T1", U), alarm(day, "T1", N))
            store.write("table", [Outcome(day * DAY, alarm_events=events)], [], {})
        store.tidy(now_us=405 * DAY, keep_days=400)
        with store._writer.begin() as connection:
            connection.exec_driver_sql("DELETE FROM alarm_event WHERE seq < 13")
        assert store.verify().findings[0] == (
            "alarm_event: rows 11 to 12 are missing before row 13"
        )


def test_an_alarm_that_is_still_open_is_kept_however_old():
    """Out of service for two years is still out of service after retention."""
    with Store.open("sqlite://") as store:
        first = (alarm(0, "T1", N), alarm(1, "T4", AlarmState.OUT_OF_SERVICE))
        store.write("table", [Outcome(DAY, alarm_events=first)], [], {})
        store.write("table", [Outcome(2 * DAY, alarm_events=(alarm(2, "T1", N),))], [], {})
        store.tidy(now_us=1000 * DAY)
        assert AlarmState.OUT_OF_SERVICE in {e.to_state for e in store.alarm_states("table")}
        assert store.verify().ok


def test_room_goes_back_to_the_disk(tmp_path: Path):
    """Incremental vacuum: the file shrinks while others may read and write."""
    with Store.open(str(tmp_path / "a.sqlite")) as store:
        readings = [Reading(n, f"sensor/T{n % 9}", n, n) for n in range(100_000)]
        store.write("table", [], readings, {})
        store.tidy(now_us=0)
        before = store.sizes().database
        done = store.tidy(now_us=1000 * DAY)
        after = store.sizes()
        assert done.rows["reading"] == 100_000
        assert after.database < before / 10
        assert after.wal == 0
        assert before - after.database >= done.pages * 4096 * 0.99


def test_a_backup_taken_while_the_daemon_writes_is_whole(tmp_path: Path):
    """A plain copy of a live WAL file is not; this one is one consistent instant."""
    stop = threading.Event()
    with Store.open(str(tmp_path / "a.sqlite")) as store:

        def write() -> None:
            n = 0
            while not stop.is_set():
                readings = [Reading(n, f"sensor/T{k}", n, n) for k in range(50)]
                store.write("table", [Outcome(n, notes=(str(n),))], readings, {})
                n += 1

        thread = threading.Thread(target=write)
        thread.start()
        try:
            while not store.notes():
                pass
            for name in ("one", "two"):
                store.backup(tmp_path / f"{name}.sqlite")
        finally:
            stop.set()
            thread.join()
    for name in ("one", "two"):
        with Store.open(str(tmp_path / f"{name}.sqlite"), read_only=True) as copy:
            assert copy.verify().ok
            assert len(list(copy.read_readings("table"))) == 50 * len(copy.notes())
    assert {p.name for p in tmp_path.glob("*")} <= {"a.sqlite", "one.sqlite", "two.sqlite"}


def test_a_backup_never_replaces_a_file(tmp_path: Path):
    (tmp_path / "old.sqlite").write_text("the only copy")
    with Store.open(str(tmp_path / "a.sqlite")) as store:
        with pytest.raises(StorageError, match="exists already"):
            store.backup(tmp_path / "old.sqlite")
        with pytest.raises(StorageError, match="does not exist"):
            store.backup(tmp_path / "none" / "b.sqlite")
    assert (tmp_path / "old.sqlite").read_text() == "the only copy"


def test_a_backup_is_a_single_file_that_can_be_written_on(tmp_path: Path):
    """After a disk loss the copy becomes the record."""
    with Store.open(str(tmp_path / "a.sqlite")) as store:
        fill(store, range(1))
        store.backup(tmp_path / "b.sqlite")
    with closing(sqlite3.connect(tmp_path / "b.sqlite")) as connection:
        assert connection.execute("PRAGMA journal_mode").fetchone() == ("delete",)
    with Store.open(str(tmp_path / "b.sqlite")) as store:
        assert store.note("table", 1, "ann", "restored") == 1
        assert len(list(store.read_readings("table"))) == 50
