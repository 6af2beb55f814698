"""Nothing is acknowledged before it is stored, and a record in trouble never stops the watch."""

from __future__ import annotations

import logging
import time
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import pytest
from sqlalchemy import event

from platewatch.adapters.bus_values import Token
from platewatch.adapters.storage import Store
from platewatch.daemon_record import DROPPED_AT_ONCE, MOST_UNSTORED, PlateRecord, Settled
from platewatch.daemon_writer import Room, Writer
from platewatch.session import Keeping
from platewatch.types import Outcome, Reading, Refused

LOG = logging.LoggerAdapter(logging.Logger("record"), {"plate": "t"})
UNITS = {"sensor/T1": "degC"}


@dataclass
class HandClock:
    """A clock that the test moves."""

    at_s: float = 1000.0

    def monotonic(self) -> float:
        return self.at_s

    def utc_us(self) -> int:
        return round(self.at_s * 1e6)


@dataclass
class Desk:
    """A record whose database can be held to so many pages, like a disk that is full."""

    folder: Path
    clock: HandClock = field(default_factory=HandClock)

    def __post_init__(self) -> None:
        self.store = Store.open(str(self.folder / "r.sqlite"))
        self.store.start_run("t", 0, "0", "")
        self._pages = 1_000_000
        event.listen(self.store._engine, "checkout", self._limit)
        plain = logging.Logger("writer")
        self.writer = Writer(self.store, self.clock, plain, ["t"], (90, 400))
        self.record = PlateRecord("t", self.writer, UNITS, LOG)
        self.sent = 0

    def _limit(self, connection: object, *_: object) -> None:
        connection.execute(f"PRAGMA max_page_count={self._pages}")  # type: ignore[attr-defined]

    def fill_up(self) -> None:
        self._pages = 1  # SQLite takes the present size where that is larger

    def make_room(self) -> None:
        self._pages = 1_000_000

    def arrive(self, count: int) -> None:
        """So many messages, each of one reading."""
        for _ in range(count):
            self.sent += 1
            reading = Reading(self.sent, "sensor/T1", 120.0, self.sent)
            self.record.waiting.readings.append(reading)
            self.record.waiting.tokens.append(Token(1, self.sent, 1))

    def turn(self, after_s: float = 5.0) -> Settled:
        """A commit, and its result."""
        self.clock.at_s += after_s
        self.record.turn(self.clock.at_s, due=True)
        until = time.monotonic() + 10
        while self.record.is_writing and time.monotonic() < until:
            found = self.record.turn(self.clock.at_s, due=False)
            if not self.record.is_writing:
                return found
            time.sleep(0.005)
        return Settled()

    def stored(self) -> int:
        return len(list(self.store.read_readings("t")))

    def keeping(self) -> Keeping:
        return self.record.state(self.clock.at_s).keeping


@pytest.fixture
def desk(tmp_path: Path) -> Iterator[Desk]:
    made = Desk(tmp_path)
    yield made
    made.writer.close()
    made.store.close()


def test_what_is_stored_is_acknowledged_and_only_then(desk: Desk) -> None:
    """Design, section 4: the acknowledgement follows the commit."""
    desk.arrive(3)
    assert [token.mid for token in desk.turn().tokens] == [1, 2, 3]
    assert desk.stored() == 3
    assert desk.keeping() is Keeping.WELL


def test_on_a_full_disk_nothing_is_acknowledged_and_nothing_forgotten(desk: Desk) -> None:
    """Design, section 8: stop acknowledging, and recover when space returns."""
    desk.arrive(1)
    desk.turn()
    desk.fill_up()
    desk.arrive(20_000)
    assert desk.turn().tokens == ()
    assert desk.keeping() is Keeping.FAILING
    assert desk.record.state(desk.clock.at_s).why.endswith("make room")
    assert desk.turn().tokens == ()
    desk.make_room()
    assert len(desk.turn().tokens) == 20_000
    assert desk.stored() == 20_001
    assert desk.keeping() is Keeping.WELL


def test_readings_held_in_memory_only_are_told_and_noted(desk: Desk) -> None:
    """The plate comes before the record, but never silently."""
    desk.fill_up()
    desk.arrive(20_000)
    desk.turn()
    assert len(desk.record.release(desk.clock.utc_us())) == 20_000
    assert desk.keeping() is Keeping.LOSING
    desk.make_room()
    desk.turn()
    desk.writer.submit(lambda: None).result(10)
    assert desk.stored() == 20_000
    assert desk.keeping() is Keeping.WELL
    (note,) = desk.store.notes("t")
    assert note.text.startswith("readings were held in memory only since")
    assert note.text.endswith("0 of them are lost")


def test_memory_is_bounded_and_what_is_lost_is_counted(desk: Desk) -> None:
    """Job, M15: the oldest readings go, and the log book says how many."""
    desk.fill_up()
    desk.arrive(MOST_UNSTORED + 1)
    desk.turn()
    assert len(desk.record.drop_oldest(desk.clock.utc_us())) == MOST_UNSTORED + 1
    assert len(desk.record.waiting.readings) == MOST_UNSTORED + 1 - DROPPED_AT_ONCE
    desk.make_room()
    desk.turn()
    desk.writer.submit(lambda: None).result(10)
    assert desk.stored() == MOST_UNSTORED + 1 - DROPPED_AT_ONCE
    assert desk.store.notes("t")[0].text.endswith(f"{DROPPED_AT_ONCE} of them are lost")


def test_a_backlog_that_comes_faster_than_a_commit_is_not_thrown_away(desk: Desk) -> None:
    """Nothing is lost while the record is being written: 60,000 readings within a second,
    5,000 messages of twelve, were once cut by the memory's share and yet acknowledged."""
    desk.arrive(MOST_UNSTORED + 10_000)
    assert desk.record.drop_oldest(desk.clock.utc_us()) == ()
    assert len(desk.turn().tokens) == MOST_UNSTORED + 10_000
    assert desk.stored() == MOST_UNSTORED + 10_000


def test_dead_letters_are_kept_by_kind_and_count(desk: Desk) -> None:
    """Counted over commits and runs; the last detail stays."""
    for seen_us, detail in ((5, "first"), (6, "second"), (7, "third")):
        refused = Refused("plates/t/x", "", "unknown channel", 2, seen_us, seen_us, detail, "'1'")
        desk.record.waiting.count(refused)
        if seen_us == 6:
            desk.turn()
    desk.turn()
    (found,) = desk.store.signs("t", 10).refusals
    assert (found.count, found.first_us, found.last_us, found.detail) == (6, 5, 7, "third")


def test_a_flood_of_kinds_of_dead_letters_stays_bounded(desk: Desk) -> None:
    """Ten thousand wrong topics are at most 500 rows and one that counts the rest."""
    for n in range(10_000):
        refused = Refused(f"plates/t/{n}", "", "unknown topic", 1, n, n, "", "")
        desk.record.waiting.count(refused)
    desk.turn()
    found = desk.store.signs("t", 10).refusals
    assert len(found) == 501
    assert sum(each.count for each in found) == 10_000


def test_ticks_are_stored_even_where_readings_are_not(tmp_path: Path, desk: Desk) -> None:
    """Alarms and peaks go on into the reserve that the full disk gives up."""
    desk.arrive(5)
    desk.record.waiting.outcomes.append(Outcome(1, notes=("alarm",)))
    desk.writer.full()
    assert not (tmp_path / "r.sqlite-reserve").exists()
    assert desk.writer.has_room_again(), "this disk has room, so the reserve is made again"
    assert (tmp_path / "r.sqlite-reserve").stat().st_size > 0
    assert len(desk.turn().outcomes) == 1


def test_little_room_is_told_two_days_ahead(desk: Desk) -> None:
    """Job, M15: one alarm at least 24 h ahead at the current rate."""
    desk.writer.room = Room(100.0, 1.9)
    assert desk.record.state(0.0).little_room
    desk.writer.room = Room(200.0, 2.1)
    assert not desk.record.state(0.0).little_room


def test_once_a_day_what_is_past_its_keeping_time_goes(desk: Desk) -> None:
    """Retention needs no one who remembers it; the writer goes on meanwhile."""
    desk.arrive(5)  # stamped in January 1970
    desk.turn()
    assert desk.stored() == 5
    desk.clock.at_s = 91 * 86_400.0
    desk.writer.turn(desk.clock.at_s)
    until = time.monotonic() + 10
    while not desk.store.notes() and time.monotonic() < until:
        time.sleep(0.01)
    assert desk.stored() == 0
    assert "removed by retention" in desk.store.notes()[0].text
