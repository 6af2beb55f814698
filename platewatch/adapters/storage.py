"""The record of the plates: one database, one writer, safe against kill -9."""

from __future__ import annotations

import hashlib
import os
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from types import TracebackType
from typing import Self

from sqlalchemy import Connection, Engine

from platewatch.adapters.storage_audit import Verification, verify_record
from platewatch.adapters.storage_chain import ChainHead, append, chain_head
from platewatch.adapters.storage_file import (
    DatabaseBusyError,
    DiskFullError,
    database_path,
    held_alone,
    is_held,
    open_engine,
    storage_errors,
)
from platewatch.adapters.storage_health import Signs, signs_of
from platewatch.adapters.storage_read import AlarmRow, AppliedAction, Note, Record, Run
from platewatch.adapters.storage_room import Sizes, give_reserve, keep_reserve, sizes_of
from platewatch.adapters.storage_seal import (
    check_seals,
    due_days,
    kept_since,
    seal_note,
    sealed_days,
)
from platewatch.adapters.storage_tables import CHAINS, clock_note, description, person_action, run
from platewatch.adapters.storage_tidy import Tidied, tidy_record
from platewatch.adapters.storage_write import (
    channel_ids,
    write_events,
    write_note,
    write_outcomes,
    write_readings,
    write_refusals,
)
from platewatch.errors import StorageError
from platewatch.types import BatchEvent, Outcome, Reading, Refused

__all__ = [
    "AlarmRow",
    "AppliedAction",
    "ChainHead",
    "DatabaseBusyError",
    "DiskFullError",
    "Note",
    "Run",
    "Signs",
    "Sizes",
    "Store",
    "Tidied",
    "Verification",
    "Written",
]


@dataclass(frozen=True, slots=True)
class Written:
    """How many readings of one call were new, and how many were there already."""

    readings: int
    duplicates: int


class Store(Record):
    """An open record. One thread writes; any number of programs may read or add actions."""

    def __init__(self, engine: Engine, path: Path | None) -> None:
        super().__init__(engine, path)
        self._writer = engine.execution_options(write=True)
        self._ids: dict[tuple[str, str, str], int] = {}
        self._runs: dict[str, tuple[int, str]] = {}  # plate: run_no, description

    @classmethod
    def open(cls, url: str, *, create: bool = True, read_only: bool = False) -> Self:
        """Open `sqlite:///file` or a plain path; `sqlite://` lives in memory.

        Raises StorageError with one line that says what is wrong and what to do.
        """
        path = database_path(url)
        return cls(open_engine(path, create=create, read_only=read_only), path)

    def close(self) -> None:
        self._engine.dispose()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        tb: TracebackType | None,
    ) -> None:
        self.close()

    def hold_alone(self) -> AbstractContextManager[None]:
        """Keep every other daemon off this database while the context lasts."""
        return held_alone(self._path)

    def start_run(
        self,
        plate: str,
        started_us: int,
        version: str,
        description_sha256: str,
        content: bytes = b"",
    ) -> int:
        """Note a start; content: the bytes of the plate description, stored once by hash."""
        if content and hashlib.sha256(content).hexdigest() != description_sha256:
            raise StorageError(f"description of plate {plate!r} does not match its SHA-256")
        row = {
            "plate": plate,
            "started_us": started_us,
            "version": version,
            "description_sha256": description_sha256,
        }
        with self._writing() as connection:
            if content:
                connection.execute(
                    description.insert().prefix_with("OR IGNORE"),
                    {"sha256": description_sha256, "content": content},
                )
            key = connection.execute(run.insert(), row).inserted_primary_key
        assert key is not None
        self._runs[plate] = (int(key[0]), description_sha256)
        return int(key[0])

    def write(
        self,
        plate: str,
        outcomes: Sequence[Outcome],
        readings: Sequence[Reading],
        units: Mapping[str, str],
        events: Sequence[BatchEvent] = (),
        refusals: Sequence[Refused] = (),
    ) -> Written:
        """Store a batch in one transaction: all of it or nothing.

        A reading already stored (same time and channel) is kept as it is and counted as a
        duplicate. units: unit of each channel name.
        """
        names = dict.fromkeys(r.channel for r in readings)
        unknown = [name for name in names if (plate, name, units.get(name, "")) not in self._ids]
        with self._writing() as connection:
            fresh = channel_ids(connection, plate, unknown, units)
            ids = {name: fresh.get(name) or self._id(plate, name, units) for name in names}
            stored = write_readings(connection, ids, readings)
            write_events(connection, plate, events)
            write_refusals(connection, plate, refusals)
            run_no, described = self._runs.get(plate, (0, ""))
            write_outcomes(connection, plate, outcomes, described)
            if outcomes:
                last = run.update().where(run.c.run_no == run_no)
                connection.execute(last.values(last_tick_us=outcomes[-1].at_us))
        # Only now: numbers given out in a transaction that failed are void.
        self._ids |= {(plate, name, units.get(name, "")): no for name, no in fresh.items()}
        return Written(stored, len(readings) - stored)

    def act(
        self,
        plate: str,
        at_us: int,
        person: str,
        verb: str,
        alarm: str,
        subject: str,
        reason: str = "",
    ) -> int:
        """Write down what a person asked for; a daemon applies it at its next tick."""
        row = {
            "at_us": at_us,
            "plate": plate,
            "person": person,
            "verb": verb,
            "alarm": alarm,
            "subject": subject,
            "reason": reason,
        }
        with self._writing() as connection:
            return append(connection, person_action, row)

    def note(self, plate: str, at_us: int, person: str, text: str) -> int:
        """Add a line to the log book."""
        with self._writing() as connection:
            return write_note(connection, plate, at_us, person, text)

    def note_clock(self, plate: str, at_us: int, offset_us: int, what: str) -> None:
        """Record a clock that was off or stepped; offset: source minus this computer."""
        row = {"at_us": at_us, "plate": plate, "offset_us": offset_us, "what": what}
        with self._writing() as connection:
            connection.execute(clock_note.insert(), row)

    def chain_heads(self) -> list[ChainHead]:
        """Last row of each chain, to be kept outside the database."""
        with storage_errors(self._path), self._engine.begin() as connection:
            return [chain_head(connection, table) for table in CHAINS]

    def verify(self, anchors: Sequence[ChainHead] = ()) -> Verification:
        """Check file, chains and descriptions; anchors: heads noted down earlier."""
        with storage_errors(self._path), self._engine.begin() as connection:
            found = verify_record(connection, anchors)
            seals, kept = sealed_days(connection), kept_since(connection)
        broken = tuple(check_seals(self, seals, kept))
        return replace(found, findings=found.findings + broken)

    def seal_days(self, plate: str, now_us: int) -> int:
        """Put the digests of finished days into the log book; the number of days sealed.

        Reads a day's rows in short transactions (about 2 s for a million); safe to call from
        another thread than the writer's.
        """
        with storage_errors(self._path), self._engine.begin() as connection:
            sealed = sealed_days(connection)
        days = due_days(self, plate, now_us, sealed)
        for day in days:
            self.note(plate, now_us, "", seal_note(self, plate, day))
        return len(days)

    def tidy(self, now_us: int, reading_days: float = 90, keep_days: float = 400) -> Tidied:
        """Remove what is past its keeping time and give the room back to the disk."""
        with storage_errors(self._path):
            return tidy_record(self._writer, now_us, reading_days, keep_days)

    def backup(self, to: Path) -> None:
        """Copy the record while others go on writing; the copy appears whole or not at all.

        Raises StorageError if the file exists already or the copy fails its check.
        """
        if to.exists():
            raise StorageError(f"{to}: exists already; name a new file")
        if not to.resolve().parent.is_dir():
            raise StorageError(f"{to}: folder {to.resolve().parent} does not exist")
        part = to.with_name(to.name + ".part")
        try:
            with storage_errors(part):
                self._copy(part)
            part.rename(to)
        finally:
            for rest in (part, part.with_name(part.name + "-journal")):
                rest.unlink(missing_ok=True)

    def sizes(self) -> Sizes:
        """Room used and left; all zero for a record in memory."""
        return sizes_of(self._path)

    def keep_reserve(self) -> bool:
        """Hold room back for alarms and peaks; is it held now?  See `storage_room`."""
        return keep_reserve(self._path)

    def give_reserve(self) -> None:
        """Give that room to the record."""
        give_reserve(self._path)

    def signs(self, plate: str, now_us: int) -> Signs:
        """What tells whether a daemon keeps this record as it should."""
        with storage_errors(self._path), self._engine.begin() as connection:
            return signs_of(connection, plate, now_us)

    def is_held(self) -> bool:
        """Does a daemon hold this record at this moment?"""
        return is_held(self._path)

    def _id(self, plate: str, name: str, units: Mapping[str, str]) -> int:
        return self._ids[plate, name, units.get(name, "")]

    def _copy(self, part: Path) -> None:
        part.unlink(missing_ok=True)
        copy = sqlite3.connect(part)
        try:
            with self._engine.connect() as connection:
                raw = connection.connection.driver_connection
                assert isinstance(raw, sqlite3.Connection)
                raw.backup(copy)
            # One file without a log beside it, whatever reads it first.
            copy.execute("PRAGMA journal_mode=DELETE")
            found = copy.execute("PRAGMA quick_check(1)").fetchone()[0]
        finally:
            copy.close()
        if found != "ok":
            raise StorageError(f"{part}: the copy is damaged ({found}); run platewatch verify")
        with open(part, "rb") as file:
            os.fsync(file.fileno())

    @contextmanager
    def _writing(self) -> Iterator[Connection]:
        with storage_errors(self._path), self._writer.begin() as connection:
            yield connection
