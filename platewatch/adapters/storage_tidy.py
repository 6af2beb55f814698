"""Retention: old rows go in small transactions, and their room goes back to the disk."""

from __future__ import annotations

import sqlite3
from collections.abc import Sequence
from dataclasses import dataclass

from sqlalchemy import ColumnElement, Connection, Engine, Table, delete, func, select

from platewatch.adapters.storage_audit import removal_note
from platewatch.adapters.storage_chain import ChainHead
from platewatch.adapters.storage_tables import (
    alarm_event,
    alarm_limit_probability,
    cause_probability,
    field_shot,
    peak,
    reading,
    zone_power,
)
from platewatch.adapters.storage_write import write_note
from platewatch.types import AlarmState

_DAY_US = 86_400_000_000
_ROWS = 10_000
_PAGES = 2000  # of 4 KiB in one step of the vacuum
_SHORT: tuple[Table, ...] = (reading, zone_power, cause_probability, field_shot)
_LONG: tuple[Table, ...] = (peak, alarm_limit_probability)


@dataclass(frozen=True, slots=True)
class Tidied:
    """Rows removed from each table that lost any;  pages: given back to the disk."""

    rows: dict[str, int]
    pages: int


def tidy_record(writer: Engine, now_us: int, reading_days: float, keep_days: float) -> Tidied:
    """Remove readings, powers and shots after reading_days, peaks and alarms after keep_days.

    The last shot of each plate stays, and so do all actions and log-book lines. A removal is
    written into the log book.
    """
    short = now_us - round(reading_days * _DAY_US)
    long = now_us - round(keep_days * _DAY_US)
    limits = {**dict.fromkeys(_SHORT, short), **dict.fromkeys(_LONG, long)}
    rows = {}
    for table, before_us in limits.items():
        rows[table.name] = _remove(writer, table, before_us)
        if rows[table.name]:
            note = removal_note(table, before_us=before_us, rows=rows[table.name])
            with writer.begin() as connection:
                write_note(connection, "", now_us, "", note)
    rows["alarm_event"] = _remove_alarms(writer, long, now_us)
    return Tidied({name: count for name, count in rows.items() if count}, _give_back(writer))


def _remove(writer: Engine, table: Table, before_us: int) -> int:
    removed = 0
    while True:
        with writer.begin() as connection:
            end = _chunk_end(connection, table, before_us)
            if end is None:
                return removed
            old = delete(table).where(table.c.at_us <= end, *_not_last(table))
            removed += connection.execute(old).rowcount
        if end == before_us - 1:
            return removed


def _chunk_end(connection: Connection, table: Table, before_us: int) -> int | None:
    """Time up to which the next chunk goes; None if nothing old is left."""
    old = select(table.c.at_us).where(table.c.at_us < before_us, *_not_last(table))
    query = old.order_by(table.c.at_us)
    if connection.execute(query.limit(1)).first() is None:
        return None
    end = connection.execute(query.offset(_ROWS - 1).limit(1)).scalar()
    return before_us - 1 if end is None else int(end)


def _not_last(table: Table) -> Sequence[ColumnElement[bool]]:
    if table is not field_shot:
        return ()
    other = field_shot.alias()
    last = select(func.max(other.c.at_us)).where(other.c.plate == field_shot.c.plate)
    return (field_shot.c.at_us < last.scalar_subquery(),)


def _remove_alarms(writer: Engine, before_us: int, now_us: int) -> int:
    """Cut the beginning of the alarm chain, never past an instance that is still not normal."""
    with writer.begin() as connection:
        last = _last_removable(connection, before_us)
        if last is None:
            return 0
        note = removal_note(alarm_event, to_seq=last.seq, hash=last.hash)
        write_note(connection, "", now_us, "", note)
        return connection.execute(delete(alarm_event).where(alarm_event.c.seq <= last.seq)).rowcount


def _last_removable(connection: Connection, before_us: int) -> ChainHead | None:
    seq = alarm_event.c.seq
    instance = (alarm_event.c.plate, alarm_event.c.alarm, alarm_event.c.subject)
    latest = select(func.max(seq)).group_by(*instance)
    still_open = alarm_event.c.to_state != str(AlarmState.NORMAL)
    first_open = select(func.min(seq)).where(seq.in_(latest), still_open)
    first_young = select(func.min(seq)).where(alarm_event.c.at_us >= before_us)
    stops = [connection.execute(query).scalar() for query in (first_open, first_young)]
    # The newest row always stays: its hash is what the next one builds on.
    stops.append(connection.execute(select(func.max(seq))).scalar())
    stop = min((number for number in stops if number is not None), default=0)
    query = select(seq, alarm_event.c.hash).where(seq < stop).order_by(seq.desc()).limit(1)
    row = connection.execute(query).first()
    return ChainHead("alarm_event", row.seq, row.hash) if row else None


def _give_back(writer: Engine) -> int:
    """Return free pages to the disk; a plain `execute` would free only one."""
    with writer.connect() as connection:
        raw = connection.connection.driver_connection
        assert isinstance(raw, sqlite3.Connection)
        before = free = _free_pages(raw)
        while free:
            raw.executescript(f"PRAGMA incremental_vacuum({_PAGES})")
            left = _free_pages(raw)
            if left >= free:
                break
            free = left
        raw.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
        return before - free


def _free_pages(raw: sqlite3.Connection) -> int:
    return int(raw.execute("PRAGMA freelist_count").fetchone()[0])
