"""The database file: its tables, its settings, and what it says when it cannot be opened."""

from __future__ import annotations

import os
import sqlite3
import tempfile
from collections.abc import Iterator
from contextlib import closing, contextmanager
from pathlib import Path

import pytest

from platewatch.adapters import storage_file
from platewatch.adapters.storage import DatabaseBusyError, DiskFullError, Store
from platewatch.errors import StorageError
from platewatch.types import Gap, Outcome, Reading

# Names and order of the published contract; columns added since stand after "+".
CONTRACT = {
    "reading": "at_us channel_id value flags seen_us",
    "channel": "id plate name unit",
    "peak": "at_us plate now_degC now_sd_K now_x_mm now_y_mm now_zone ahead_degC ahead_sd_K "
    "ahead_in_s ahead_x_mm ahead_y_mm ahead_zone limit_degC p_over to_limit_s cause",
    "zone_power": "at_us plate zone called_W inferred_W sd_W",
    "cause_probability": "at_us plate cause place probability",
    "alarm_limit_probability": "at_us plate alarm_limit p_over to_limit_s "
    "+ to_limit_05_s to_limit_95_s",
    "field_shot": "at_us plate basis state",
    "alarm_event": "seq at_us seen_us plate alarm subject place from_state to_state priority "
    "value limit_value limit_version cause group_no person reason prev_hash hash + message",
    "person_action": "seq at_us plate person verb alarm subject reason prev_hash hash",
    "log_note": "seq at_us plate person text prev_hash hash",
    "run": "run_no started_us version description_sha256 + plate last_tick_us",
    "gap": "plate from_us what to_us",
}

READINGS = [Reading(n * 2_000_000, f"sensor/T{k}", 20.0 + k, 0) for n in range(3) for k in (1, 2)]


def url(path: Path) -> str:
    return f"sqlite:///{path}"


def new_record(path: Path) -> Path:
    with Store.open(url(path)) as store:
        store.write("table", [], READINGS, {})
    return path


@contextmanager
def raw(path: Path) -> Iterator[sqlite3.Connection]:
    with closing(sqlite3.connect(path, isolation_level=None)) as connection:
        yield connection


@pytest.fixture
def ordinary_user() -> Iterator[Path]:
    """A folder of an ordinary user, and that user's rights if the tests run as root."""
    folder = Path(tempfile.mkdtemp(prefix="plate-"))
    root = os.geteuid() == 0
    if root:
        os.chown(folder, 65534, -1)
        os.seteuid(65534)
    try:
        yield folder
    finally:
        if root:
            os.seteuid(0)
        folder.chmod(0o700)
        for file in folder.iterdir():
            file.unlink()
        folder.rmdir()


@pytest.mark.parametrize("table", CONTRACT)
def test_every_table_of_the_contract_has_its_columns(table: str, tmp_path: Path):
    """Other programs read these names; a renamed column breaks them."""
    promised, _, added = CONTRACT[table].partition("+")
    with raw(new_record(tmp_path / "a.sqlite")) as connection:
        found = [row[1] for row in connection.execute(f"PRAGMA table_info({table})")]
    assert [name for name in found if name not in added.split()] == promised.split()
    assert set(added.split()) <= set(found)


def test_readings_are_keyed_by_time_and_channel_without_a_row_number(tmp_path: Path):
    """20 bytes a reading rest on WITHOUT ROWID and this key."""
    with raw(new_record(tmp_path / "a.sqlite")) as connection:
        (text,) = connection.execute(
            "SELECT sql FROM sqlite_master WHERE name='reading'"
        ).fetchone()
        with pytest.raises(sqlite3.OperationalError, match="no such column"):
            connection.execute("SELECT rowid FROM reading")
    assert "PRIMARY KEY (at_us, channel_id)" in text


def test_the_file_is_set_up_to_survive_a_power_cut_and_to_shrink(tmp_path: Path):
    """WAL, synchronous FULL (2), auto_vacuum INCREMENTAL (2), busy timeout 5 s."""
    path = tmp_path / "a.sqlite"
    with Store.open(url(path)) as store, store._engine.connect() as connection:
        found = {
            name: connection.exec_driver_sql(f"PRAGMA {name}").scalar()
            for name in ("journal_mode", "synchronous", "auto_vacuum", "busy_timeout")
        }
    assert found == {
        "journal_mode": "wal",
        "synchronous": 2,
        "auto_vacuum": 2,
        "busy_timeout": 5000,
    }


def test_a_record_can_be_opened_by_url_by_plain_path_and_in_memory(tmp_path: Path):
    """Commands take --db FILE, descriptions take a URL."""
    new_record(tmp_path / "a.sqlite")
    with Store.open(str(tmp_path / "a.sqlite"), create=False) as store:
        assert list(store.read_readings("table")) == READINGS
    with Store.open("sqlite://") as store:
        store.write("table", [], READINGS, {})
        assert list(store.read_readings("table")) == READINGS


def test_a_file_name_with_special_characters_is_taken_as_it_is(tmp_path: Path):
    """'%', '?' and '#' mean something in URLs, nothing in file names."""
    path = tmp_path / "plate 50% #1?.sqlite"
    with Store.open(str(path)) as store:
        store.write("table", [], READINGS, {})
    assert path.exists()
    with Store.open(str(path), read_only=True) as store:
        assert list(store.read_readings("table")) == READINGS


def one_line(error: pytest.ExceptionInfo[StorageError]) -> str:
    text = str(error.value)
    assert "\n" not in text
    return text


def test_a_missing_folder_is_named(tmp_path: Path):
    with pytest.raises(StorageError) as error:
        Store.open(url(tmp_path / "none" / "a.sqlite"))
    assert f"folder {tmp_path / 'none'} does not exist" in one_line(error)


def test_a_missing_file_is_not_created_by_a_command_that_reads(tmp_path: Path):
    for options in ({"create": False}, {"read_only": True}):
        with pytest.raises(StorageError) as error:
            Store.open(url(tmp_path / "a.sqlite"), **options)
        assert "no such database" in one_line(error)
    assert list(tmp_path.iterdir()) == []


def test_a_folder_given_as_a_file_is_refused(tmp_path: Path):
    with pytest.raises(StorageError) as error:
        Store.open(url(tmp_path))
    assert "is a folder" in one_line(error)


def test_a_text_file_is_not_taken_for_a_database_and_stays_unharmed(tmp_path: Path):
    path = tmp_path / "notes.txt"
    path.write_text("at,sensor/T1\n" * 1000)
    with pytest.raises(StorageError) as error:
        Store.open(url(path))
    assert "is not a database" in one_line(error)
    assert path.read_text() == "at,sensor/T1\n" * 1000


def test_a_database_of_another_program_is_refused_and_stays_unharmed(tmp_path: Path):
    path = tmp_path / "other.sqlite"
    with raw(path) as connection:
        connection.execute("CREATE TABLE bills (amount)")
    before = path.read_bytes()
    with pytest.raises(StorageError) as error:
        Store.open(url(path))
    assert "not one of platewatch" in one_line(error)
    assert path.read_bytes() == before


@pytest.mark.parametrize(("number", "remedy"), [(99, "update platewatch"), (-1, "db-upgrade")])
def test_a_wrong_schema_number_names_the_remedy(number: int, remedy: str, tmp_path: Path):
    """The daemon checks one number and never changes tables by itself."""
    path = new_record(tmp_path / "a.sqlite")
    with raw(path) as connection:
        connection.execute(f"PRAGMA user_version={number}")
    with pytest.raises(StorageError) as error:
        Store.open(url(path))
    assert f"schema number {number}" in one_line(error)
    assert remedy in str(error.value)


def test_the_schema_number_stands_in_its_table_too(tmp_path: Path):
    """PRAGMA user_version is SQLite's own; other databases read the table."""
    with raw(new_record(tmp_path / "a.sqlite")) as connection:
        rows = connection.execute("SELECT number FROM schema_number").fetchall()
        assert rows == connection.execute("PRAGMA user_version").fetchall()


def test_a_folder_without_write_permission_is_named(ordinary_user: Path):
    ordinary_user.chmod(0o500)
    with pytest.raises(StorageError) as error:
        Store.open(url(ordinary_user / "a.sqlite"))
    assert f"folder {ordinary_user} is not writable" in one_line(error)


def test_a_closed_record_in_a_locked_folder_can_still_be_read(ordinary_user: Path):
    """An archive on read-only media is read without writing anything beside it."""
    path = new_record(ordinary_user / "a.sqlite")
    ordinary_user.chmod(0o500)
    with Store.open(url(path), read_only=True) as store:
        assert list(store.read_readings("table")) == READINGS


def test_a_file_of_another_user_is_refused(ordinary_user: Path):
    path = new_record(ordinary_user / "a.sqlite")
    path.chmod(0o000)
    with pytest.raises(StorageError) as error:
        Store.open(url(path))
    assert "not readable and writable" in one_line(error)


def test_a_record_opened_for_reading_cannot_be_written(tmp_path: Path):
    path = new_record(tmp_path / "a.sqlite")
    with Store.open(url(path), read_only=True) as store, pytest.raises(StorageError) as error:
        store.note("table", 1, "ann", "hello")
    assert "cannot be written" in one_line(error)


def test_a_network_share_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """WAL needs shared memory, which a network file system cannot give (sqlite.org/wal.html)."""
    mounts = f"/dev/sda1 / ext4 rw 0 0\nserver:/plates {tmp_path} nfs4 rw 0 0\n"
    monkeypatch.setattr(storage_file, "_mounts", lambda: mounts)
    with pytest.raises(StorageError) as error:
        Store.open(url(tmp_path / "a.sqlite"))
    assert "network share (nfs4)" in one_line(error)


@pytest.mark.parametrize(
    ("folder", "kind"),
    [
        ("/srv/share/plates", "cifs"),
        ("/srv/shared", "ext4"),
        ("/srv/share with blank/x", "nfs"),
        ("/srv", "ext4"),
        ("/", "ext4"),
    ],
)
def test_the_deepest_mount_decides_about_a_folder(folder: str, kind: str):
    """proc(5): blanks in mount points are written as \\040."""
    mounts = (
        "/dev/root / ext4 rw 0 0\n//nas/p /srv/share cifs rw 0 0\n"
        "nas:/b /srv/share\\040with\\040blank nfs rw 0 0\n"
    )
    assert storage_file.file_system_of(Path(folder), mounts) == kind


def test_a_lock_held_by_another_program_is_reported(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
):
    monkeypatch.setattr(storage_file, "BUSY_TIMEOUT_S", 0.05)
    path = new_record(tmp_path / "a.sqlite")
    with Store.open(url(path)) as store, raw(path) as other:
        other.execute("BEGIN IMMEDIATE")
        with pytest.raises(DatabaseBusyError) as error:
            store.write("table", [], READINGS, {})
        assert "locked by another program" in one_line(error)
        other.execute("ROLLBACK")
        assert store.write("table", [], READINGS, {}).duplicates == len(READINGS)


def test_a_full_disk_stores_nothing_of_the_batch_and_writing_goes_on_when_room_is_back(
    tmp_path: Path,
):
    """No half batch may be acknowledged; recover without a restart."""
    many = [Reading(n, "sensor/T9", 20.0, n) for n in range(100_000)]
    with Store.open(url(tmp_path / "a.sqlite")) as store:
        limit_pages(store, 60)
        with pytest.raises(DiskFullError) as error:
            store.write("table", [], many, {})
        assert "disk full" in one_line(error)
        assert list(store.read_readings("table")) == []
        limit_pages(store, 1_000_000)
        assert store.write("table", [], many, {}).readings == len(many)
        assert store.verify().ok


def limit_pages(store: Store, pages: int) -> None:
    """Stands for a full disk: SQLite reports the same error code, SQLITE_FULL."""
    with store._engine.connect() as connection:
        connection.exec_driver_sql(f"PRAGMA max_page_count={pages}").all()


@pytest.mark.parametrize("bad", ["oracle://x/y", "postgresql://host/plates", "://"])
def test_a_url_that_is_none_of_ours_is_refused_with_an_example(bad: str):
    with pytest.raises(StorageError) as error:
        Store.open(bad)
    assert "write sqlite:///folder/name.sqlite" in one_line(error)


def test_only_one_daemon_may_hold_a_database(tmp_path: Path):
    """Two instances on one database would both judge the same alarms."""
    path = tmp_path / "a.sqlite"
    with Store.open(url(path)) as first, Store.open(url(path)) as second:
        with first.hold_alone():
            with pytest.raises(StorageError) as error, second.hold_alone():
                pass
            assert f"process {os.getpid()}" in one_line(error)
        with second.hold_alone():
            pass


def test_two_programs_that_create_the_same_file_both_get_it(tmp_path: Path):
    """Schema creation holds the write lock; the second finds the tables there."""
    with (
        Store.open(url(tmp_path / "a.sqlite")) as one,
        Store.open(url(tmp_path / "a.sqlite")) as two,
    ):
        one.write("table", [], READINGS, {})
        assert two.write("table", [], READINGS, {}).duplicates == len(READINGS)


def test_a_record_with_a_gap_is_found_sound(tmp_path: Path) -> None:
    """`verify` once took the gap's own row for a damaged one (SQLite 3.40, key not first)."""
    with Store.open(url(tmp_path / "gap.sqlite")) as store:
        quiet = Outcome(60_000_000, gaps=(Gap(10_000_000, 50_000_000, "no usable reading"),))
        store.write("table", [quiet], READINGS, {})
        assert not list(store.verify().findings)
        assert store.gaps("table") == [Gap(10_000_000, 50_000_000, "no usable reading")]
