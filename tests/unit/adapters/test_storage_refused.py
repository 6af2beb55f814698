"""Rows of what was refused: kept with their flags, and never in the way of a good value."""

from __future__ import annotations

from pathlib import Path

import pytest

from platewatch.adapters.messages import FURTHEST_KEPT_US, FUTURE_US, Routes
from platewatch.adapters.storage import Store
from platewatch.types import FILLED, Flag, Gap, Outcome, Reading
from platewatch.units import iso

NOW_US = 1_772_352_000_000_000
ROUTES = Routes("t", {"T1": "degC"}, {})


@pytest.mark.parametrize(
    ("ahead_us", "kept"), [(FUTURE_US + 1_000_000, True), (FURTHEST_KEPT_US + 1_000_000, False)]
)
def test_a_stamp_from_the_future_is_refused_and_its_row_says_why(ahead_us: int, kept: bool) -> None:
    """A row with its flags, unless the stamp is beyond all sense."""
    body = f'{{"at": "{iso(NOW_US + ahead_us)}", "sensor/T1": 120.0}}'
    found = ROUTES.decode("plates/t/readings", body.encode(), NOW_US)
    assert found.readings == ()
    (refusal,) = found.refusals
    assert "set the clock of the source" in refusal.detail
    assert (refusal.reading is not None) is kept
    if refusal.reading is not None:
        assert refusal.reading.flags == Flag.REFUSED | Flag.FUTURE
        assert not refusal.reading.usable


def test_a_good_value_takes_the_place_of_a_refused_one_of_the_same_instant() -> None:
    """A clock that was ahead and is put right stamps those seconds once more."""
    ahead = Reading(NOW_US, "sensor/T1", 99.0, 1, Flag.REFUSED | Flag.FUTURE)
    good = Reading(NOW_US, "sensor/T1", 120.0, 2)
    with Store.open("sqlite://") as store:
        store.write("t", [], [ahead], {})
        store.write("t", [], [good], {})
        assert list(store.read_readings("t")) == [good]
        store.write("t", [], [ahead, Reading(NOW_US, "sensor/T1", 5.0, 3)], {})
        assert list(store.read_readings("t")) == [good]


def test_a_gap_that_was_filled_replaces_the_one_that_was_open() -> None:
    """One row a gap, with its last word."""
    with Store.open("sqlite://") as store:
        for end, what in ((10, "no usable reading"), (20, "no usable reading"), (30, FILLED)):
            store.write("t", [Outcome(end, gaps=(Gap(5, end, what),))], [], {})
        assert store.gaps("t") == [Gap(5, 30, FILLED)]


def test_a_record_of_before_there_were_dead_letters_is_still_read(tmp_path: Path) -> None:
    """Only looking at it changes nothing in it; opening it to write adds the table."""
    path = str(tmp_path / "r.sqlite")
    with Store.open(path) as store, store._writer.begin() as connection:
        connection.exec_driver_sql("DROP TABLE refusal")
    with Store.open(path, read_only=True) as store:
        assert store.signs("t", NOW_US).refusals == ()
    with Store.open(path) as store, store._writer.begin() as connection:
        assert connection.exec_driver_sql("SELECT count(*) FROM refusal").scalar() == 0
