"""Finished days are sealed: raw rows cannot be changed unnoticed either."""

from __future__ import annotations

from dataclasses import replace

import pytest

from platewatch.adapters.storage import Store
from platewatch.types import Outcome, PeakRow, Reading

DAY = 86_400_000_000
HOUR = DAY // 24
PEAK = PeakRow(
    0, 130.0, 0.5, 1.0, 2.0, "Z1", 139.0, 1.0, 60.0, 1.0, 2.0, "Z1", None, None, None, ""
)


@pytest.fixture
def store():
    """Three days of a plate, the last one unfinished."""
    with Store.open("sqlite://") as opened:
        opened.start_run("table", 100 * DAY, "0.1", "ab")
        for at in range(100 * DAY, 102 * DAY + 2 * HOUR, HOUR):
            readings = [Reading(at, f"sensor/T{k}", 20.0 + k / 7, at + 1) for k in range(3)]
            opened.write("table", [Outcome(at, peak=replace(PEAK, at_us=at))], readings, {})
        yield opened


def execute(store: Store, sql: str) -> None:
    with store._writer.begin() as connection:
        assert connection.exec_driver_sql(sql).rowcount == 1


def test_every_finished_day_is_sealed_once(store: Store):
    assert store.seal_days("table", 102 * DAY + 2 * HOUR) == 2
    assert store.seal_days("table", 102 * DAY + 2 * HOUR) == 0
    assert store.verify().findings == ()


def test_a_day_is_not_sealed_while_its_rows_may_still_come(store: Store):
    """An hour after its end at the earliest, and after a tick of the next day."""
    assert store.seal_days("table", 102 * DAY + HOUR - 1) == 1
    assert store.seal_days("table", 109 * DAY) == 1


def test_a_late_reading_does_not_break_a_seal(store: Store):
    """Backlog stamped yesterday is stored, flagged, and outside yesterday's seal."""
    store.seal_days("table", 102 * DAY + 2 * HOUR)
    late = Reading(100 * DAY + 5, "sensor/T1", 20.0, 102 * DAY + 3 * HOUR)
    assert store.write("table", [], [late], {}).readings == 1
    assert store.verify().ok


@pytest.mark.parametrize(
    ("sql", "finding"),
    [
        (
            f"UPDATE reading SET value = value + 1e-9 WHERE at_us = {100 * DAY} AND channel_id = 1",
            "reading rows of plate 'table' on 1970-04-11 (UTC) are not those sealed: "
            "72 rows now, 72 then",
        ),
        (
            f"DELETE FROM reading WHERE at_us = {101 * DAY} AND channel_id = 2",
            "reading rows of plate 'table' on 1970-04-12 (UTC) are not those sealed: "
            "71 rows now, 72 then",
        ),
        (
            f"UPDATE peak SET now_degC = 129.9 WHERE at_us = {101 * DAY}",
            "peak rows of plate 'table' on 1970-04-12 (UTC) are not those sealed: "
            "24 rows now, 24 then",
        ),
        (
            f"INSERT INTO reading VALUES ({100 * DAY + 7}, 1, 20.0, 0, {100 * DAY + 8})",
            "reading rows of plate 'table' on 1970-04-11 (UTC) are not those sealed: "
            "73 rows now, 72 then",
        ),
    ],
    ids=["a reading changed", "a reading removed", "a peak changed", "a reading added"],
)
def test_a_changed_removed_or_added_raw_row_is_found(store: Store, sql: str, finding: str):
    store.seal_days("table", 102 * DAY + 2 * HOUR)
    execute(store, sql)
    assert store.verify().findings == (finding,)


def test_retention_of_sealed_days_is_no_finding(store: Store):
    """Readings of the first day are gone, its peaks still stand under their seal."""
    store.seal_days("table", 102 * DAY + 2 * HOUR)
    assert store.tidy(now_us=191 * DAY, reading_days=90).rows["reading"] == 72
    assert store.verify().findings == ()
    execute(store, f"UPDATE peak SET now_degC = 129.9 WHERE at_us = {100 * DAY}")
    assert len(store.verify().findings) == 1


@pytest.mark.parametrize("text", ["sealed: {}", "sealed: [1]", "sealed: x", 'sealed: {"plate": 1}'])
def test_a_garbled_line_in_the_log_book_stops_no_check(store: Store, text: str):
    """verify must not fall over the very thing it looks for."""
    store.note("table", 1, "", text)
    store.note("table", 1, "", text.replace("sealed", "removed by retention"))
    assert store.verify().findings == ()
    assert store.seal_days("table", 102 * DAY + 2 * HOUR) == 2
