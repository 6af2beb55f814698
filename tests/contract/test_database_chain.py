"""Hash chains: `verify` finds every changed, removed or inserted row."""

from __future__ import annotations

import hashlib
import os
import random
import shutil
import sqlite3
import subprocess
import sys
from contextlib import closing
from pathlib import Path

import pytest

from platewatch.adapters.storage import ChainHead, Store
from platewatch.types import AlarmEvent, AlarmState, Outcome

CHAINS = ("person_action", "alarm_event", "log_note")
GENESIS = "0" * 64


def alarm(n: int) -> AlarmEvent:
    return AlarmEvent(
        at_us=n * 2_000_000,
        alarm="peak-coming",
        subject=f"L{n % 3}",
        place="zone Z1, 120 mm from the left",
        from_state=AlarmState.NORMAL,
        to_state=AlarmState.UNACKNOWLEDGED,
        priority="high",
        value=120.0 + n / 3,
        limit_value=None if n % 4 == 0 else 135.0,
        cause="loose thermocouple T4 – 62 %",
        message="hottest place passes 135 °C in 6 min",
        group_no=n,
    )


@pytest.fixture(scope="module")
def record(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A closed record with 30 rows in each chain."""
    path = tmp_path_factory.mktemp("chain") / "a.sqlite"
    with Store.open(str(path)) as store:
        for n in range(30):
            outcome = Outcome(n * 2_000_000, alarm_events=(alarm(n),), notes=(f"note {n}",))
            store.write("table", [outcome], [], {})
            store.act("table", n, "ann", "ack", "peak-coming", f"L{n % 3}", "seen 'it'; né")
    return path


def rows_of(connection: sqlite3.Connection, table: str) -> list[tuple[object, ...]]:
    return connection.execute(f"SELECT * FROM {table} ORDER BY seq").fetchall()


def change(connection: sqlite3.Connection, table: str, dice: random.Random) -> None:
    """One cell gets another value: a number, text, bytes, nothing, or a cell of another row."""
    columns = [row[1] for row in connection.execute(f"PRAGMA table_info({table})")]
    column = dice.choice(columns)
    seq = dice.randint(1, 30)
    other = dice.choice(rows_of(connection, table))[columns.index(column)]
    new = dice.choice([other, dice.randint(0, 10**6), dice.random(), "x", b"x", "", None])
    if column == "seq":
        new = dice.randint(31, 99)
    connection.execute(f"UPDATE {table} SET {column} = ? WHERE seq = ?", (new, seq))


def remove(connection: sqlite3.Connection, table: str, dice: random.Random) -> None:
    connection.execute(f"DELETE FROM {table} WHERE seq = ?", (dice.randint(1, 30),))


def insert(connection: sqlite3.Connection, table: str, dice: random.Random) -> None:
    """A copy of a row in the middle, the rows behind it moved up by one, or at the end."""
    at = dice.randint(1, 31)
    connection.execute(f"UPDATE {table} SET seq = -seq - 1 WHERE seq >= ?", (at,))
    connection.execute(f"UPDATE {table} SET seq = -seq WHERE seq < 0")
    row = list(dice.choice(rows_of(connection, table)))
    row[0] = at
    connection.execute(f"INSERT INTO {table} VALUES ({', '.join('?' * len(row))})", row)


def swap(connection: sqlite3.Connection, table: str, dice: random.Random) -> None:
    one, two = dice.sample(range(1, 31), 2)
    for old, new in ((one, -1), (two, one), (-1, two)):
        connection.execute(f"UPDATE {table} SET seq = ? WHERE seq = ?", (new, old))


def edited(path: Path, dice: random.Random) -> str:
    """Make one random edit that really alters the chain; the name of its table."""
    table = dice.choice(CHAINS)
    edit = dice.choice((change, change, remove, insert, swap))
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("PRAGMA synchronous=OFF")
        before = rows_of(connection, table)
        while rows_of(connection, table) == before:
            try:
                edit(connection, table, dice)
            except sqlite3.IntegrityError:
                connection.rollback()
        connection.commit()
    return table


def test_an_untouched_record_has_no_finding(record: Path):
    with Store.open(str(record), read_only=True) as store:
        found = store.verify()
    assert found.findings == ()
    assert [(head.table, head.seq) for head in found.heads] == [(name, 30) for name in CHAINS]
    assert "cannot be told" in found.caution


def test_verify_finds_every_random_edit(record: Path, tmp_path: Path):
    """1000 random edits, none missed; 200 of them by default, PLATEWATCH_EDITS=1000 for all."""
    missed = []
    for seed in range(int(os.environ.get("PLATEWATCH_EDITS", "200"))):
        path = tmp_path / "edited.sqlite"
        shutil.copy(record, path)
        table = edited(path, random.Random(seed))
        with Store.open(str(path), read_only=True) as store:
            if not any(line.startswith(table) for line in store.verify().findings):
                missed.append(seed)
    assert missed == []


def test_a_changed_row_is_named_by_table_and_number(record: Path, tmp_path: Path):
    """The auditor looks at one row, not at thousands: later rows are not blamed."""
    path = Path(shutil.copy(record, tmp_path / "edited.sqlite"))
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("UPDATE person_action SET reason = 'none' WHERE seq = 17")
    with Store.open(str(path), read_only=True) as store:
        assert store.verify().findings == ("person_action row 17: changed after it was written",)


def test_removed_rows_are_counted(record: Path, tmp_path: Path):
    path = Path(shutil.copy(record, tmp_path / "edited.sqlite"))
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("DELETE FROM alarm_event WHERE seq BETWEEN 4 AND 6 OR seq > 28")
    with Store.open(str(path), read_only=True) as store:
        assert store.verify().findings == (
            "alarm_event: rows 4 to 6 are missing before row 7",
            "alarm_event row 7: does not follow the row before it",
            "alarm_event: rows 29 to 30 are missing at the end",
        )


def test_writing_on_after_a_cut_tail_does_not_hide_it(record: Path, tmp_path: Path):
    """Row numbers are never used twice."""
    path = Path(shutil.copy(record, tmp_path / "edited.sqlite"))
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("DELETE FROM log_note WHERE seq > 28")
    with Store.open(str(path)) as store:
        assert store.note("table", 1, "ann", "later") == 31
        assert store.verify().findings == ("log_note: rows 29 to 30 are missing before row 31",)


def test_a_careful_cut_of_the_tail_is_found_by_a_hash_kept_outside_only(
    record: Path, tmp_path: Path
):
    """The caution of `verify` is true: without the anchor this forgery passes."""
    path = Path(shutil.copy(record, tmp_path / "edited.sqlite"))
    with Store.open(str(path)) as store:
        anchors = store.chain_heads()
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("DELETE FROM person_action WHERE seq > 28")
        connection.execute("UPDATE sqlite_sequence SET seq = 28 WHERE name = 'person_action'")
    with Store.open(str(path), read_only=True) as store:
        assert store.verify().ok
        assert store.verify(anchors).findings == (
            "person_action: row 30, known from outside, is missing",
        )


def test_an_anchor_of_another_history_is_found(record: Path):
    with Store.open(str(record), read_only=True) as store:
        found = store.verify([ChainHead("log_note", 12, "f" * 64)])
    assert found.findings == ("log_note row 12: differs from the hash known from outside",)


def test_the_hash_can_be_recomputed_by_hand(tmp_path: Path):
    """An auditor needs no platewatch: SHA-256 of sorted, blank-free ASCII JSON."""
    with Store.open(str(tmp_path / "a.sqlite")) as store:
        store.note("table", 1_700_000_000_000_000, "ann", "90 °C")
        head = next(head for head in store.chain_heads() if head.table == "log_note")
    text = (
        '{"at_us":1700000000000000,"person":"ann","plate":"table","prev_hash":"' + GENESIS + '",'
        '"seq":1,"table":"log_note","text":"90 \\u00b0C"}'
    )
    assert head.hash == hashlib.sha256(text.encode()).hexdigest()


@pytest.mark.parametrize("text", ["", "\ud800 half a pair", "nul \0 inside", "ẞ🔥\n", "a" * 10_000])
def test_any_text_a_person_types_keeps_the_chain_whole(text: str):
    with Store.open("sqlite://") as store:
        store.act("table", 1, text, "ack", "peak-now", text, text)
        store.note("table", 1, text, text)
        assert store.verify().ok


def test_a_changed_plate_description_is_found(tmp_path: Path):
    """Every run names its description by hash."""
    path = tmp_path / "a.sqlite"
    content = b'[plate]\nname = "table"\n'
    digest = hashlib.sha256(content).hexdigest()
    with Store.open(str(path)) as store:
        store.start_run("table", 1, "0.1", digest, content)
        assert store.description_of(digest) == content
        assert store.verify().ok
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("UPDATE description SET content = x'00'")
    with Store.open(str(path)) as store:
        assert store.verify().findings == (
            f"description {digest[:12]}: changed after it was written",
        )


ACT = """
import sys
from platewatch.adapters.storage import Store
with Store.open(sys.argv[1]) as store:
    for n in range(100):
        store.act("table", n, sys.argv[2], "ack", "peak-now", "L1")
        store.note("table", n, sys.argv[2], str(n))
"""


def test_two_programs_writing_at_once_extend_one_chain(tmp_path: Path):
    """A command acknowledges while the page does: no row lost, no fork in the chain."""
    path = str(tmp_path / "a.sqlite")
    programs = [subprocess.Popen([sys.executable, "-c", ACT, path, who]) for who in ("ann", "bo")]
    assert [program.wait(timeout=50) for program in programs] == [0, 0]
    with Store.open(path, read_only=True) as store:
        people = [found.action.person for found in store.actions("table")]
        assert sorted(people) == ["ann"] * 100 + ["bo"] * 100
        assert store.verify().ok
        assert [head.seq for head in store.verify().heads] == [200, 0, 200]
