"""Queries on the record; long ones come in short transactions, so that the WAL stays small."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

from sqlalchemy import ColumnElement, Connection, Engine, Row, Select, Table, func, select

from platewatch.adapters.storage_file import storage_errors
from platewatch.adapters.storage_state import unpack_state
from platewatch.adapters.storage_tables import (
    action_applied,
    alarm_event,
    alarm_limit_probability,
    basis,
    batch,
    channel,
    description,
    field_shot,
    gap,
    log_note,
    peak,
    person_action,
    reading,
    run,
    zone_power,
)
from platewatch.errors import StorageError
from platewatch.types import (
    Action,
    AlarmEvent,
    AlarmState,
    BatchEvent,
    FieldShot,
    Flag,
    Gap,
    LimitRow,
    PeakRow,
    Reading,
    ZonePowerRow,
)

_FLAGS = {number: Flag(number) for number in range(64)}
_PEAK_OPTIONAL = {"limit_degC", "p_over", "to_limit_s"}


@dataclass(frozen=True, slots=True)
class Run:
    """One start of the daemon or of a replay for one plate.

    last_tick_us: the last tick that was stored; None before the first
    """

    run_no: int
    plate: str
    started_us: int
    version: str
    description_sha256: str
    last_tick_us: int | None


@dataclass(frozen=True, slots=True)
class AlarmRow:
    """A stored alarm event with its place in the record."""

    seq: int
    seen_us: int
    plate: str
    event: AlarmEvent
    hash: str


@dataclass(frozen=True, slots=True)
class AppliedAction:
    """A person's action and the tick that used it (None: not yet)."""

    action: Action
    applied_us: int | None


@dataclass(frozen=True, slots=True)
class Note:
    """A line of the log book; person is empty for lines of the program itself."""

    seq: int
    at_us: int
    plate: str
    person: str
    text: str


class Record:
    """A record that can be read. Times are half-open: from_us <= at_us < to_us, None is open."""

    chunk = 5000  # rows, give or take those of one instant

    def __init__(self, engine: Engine, path: Path | None) -> None:
        self._engine = engine
        self._path = path

    def plates(self) -> list[str]:
        """Every plate that has a run or a channel here."""
        query = select(run.c.plate).union(select(channel.c.plate)).order_by("plate")
        return [row.plate for row in self._all(query)]

    def units(self, plate: str) -> dict[str, str]:
        """Unit of each channel; the latest where it changed."""
        query = select(channel).where(channel.c.plate == plate).order_by(channel.c.id)
        return {row.name: row.unit for row in self._all(query)}

    def runs(self, plate: str) -> list[Run]:
        query = select(run).where(run.c.plate == plate).order_by(run.c.run_no)
        return [Run(**row._mapping) for row in self._all(query)]

    def description_of(self, sha256: str) -> bytes | None:
        """The plate description a run was started with, if it was stored."""
        query = select(description.c.content).where(description.c.sha256 == sha256)
        return next((row.content for row in self._all(query)), None)

    def description_of_basis(self, basis_hash: str) -> str | None:
        """SHA-256 of the description whose reduction gave this basis."""
        query = select(basis.c.description_sha256).where(basis.c.hash == basis_hash)
        return next((row.description_sha256 for row in self._all(query)), None)

    def read_readings(
        self, plate: str, from_us: int | None = None, to_us: int | None = None
    ) -> Iterator[Reading]:
        """Readings in (at_us, channel) order; a stored NULL is not a number."""
        for row in self.reading_rows(plate, from_us, to_us):
            value = math.nan if row.value is None else row.value
            flags = _FLAGS.get(row.flags) or Flag(row.flags)
            yield Reading(row.at_us, row.name, value, row.seen_us, flags)

    def reading_rows(
        self, plate: str, from_us: int | None = None, to_us: int | None = None
    ) -> Iterator[Row[Any]]:
        """The same as rows (at_us, name, value, unit, flags, seen_us), for export."""
        columns = (
            reading.c.at_us,
            channel.c.name,
            reading.c.value,
            channel.c.unit,
            reading.c.flags,
            reading.c.seen_us,
        )
        query = select(*columns).join(channel).where(channel.c.plate == plate)
        order = (reading.c.at_us, channel.c.name, channel.c.id)
        return self._chunks(query, reading, from_us, to_us, order)

    def peaks(
        self, plate: str, from_us: int | None = None, to_us: int | None = None
    ) -> Iterator[PeakRow]:
        return (_peak(row) for row in self._of_plate(peak, plate, from_us, to_us))

    def zone_powers(
        self, plate: str, from_us: int | None = None, to_us: int | None = None
    ) -> Iterator[ZonePowerRow]:
        for row in self._of_plate(zone_power, plate, from_us, to_us, zone_power.c.zone):
            watts = (_or_nan(row.called_W), _or_nan(row.inferred_W), _or_nan(row.sd_W))
            yield ZonePowerRow(row.at_us, row.zone, *watts)

    def limit_probabilities(
        self, plate: str, from_us: int | None = None, to_us: int | None = None
    ) -> Iterator[LimitRow]:
        table = alarm_limit_probability
        for row in self._of_plate(table, plate, from_us, to_us, table.c.alarm_limit):
            times = (row.to_limit_05_s, row.to_limit_s, row.to_limit_95_s)
            yield LimitRow(row.at_us, row.alarm_limit, _or_nan(row.p_over), times)

    def alarm_events(
        self, plate: str, from_us: int | None = None, to_us: int | None = None
    ) -> Iterator[AlarmRow]:
        rows = self._of_plate(alarm_event, plate, from_us, to_us, alarm_event.c.seq)
        return (_alarm(row) for row in rows)

    def events(
        self, plate: str, from_us: int | None = None, to_us: int | None = None
    ) -> Iterator[BatchEvent]:
        """Batch events as received, by their time, then in order of arrival."""
        for row in self._of_plate(batch, plate, from_us, to_us, batch.c.id):
            yield BatchEvent(row.at_us, row.event, row.detail)

    def gaps(self, plate: str) -> list[Gap]:
        query = select(gap).where(gap.c.plate == plate).order_by(gap.c.from_us, gap.c.what)
        return [Gap(row.from_us, row.to_us, row.what) for row in self._all(query)]

    def notes(self, plate: str | None = None) -> list[Note]:
        query = select(log_note).order_by(log_note.c.seq)
        rows = self._all(query if plate is None else query.where(log_note.c.plate == plate))
        return [Note(row.seq, row.at_us, row.plate, row.person, row.text) for row in rows]

    def actions(self, plate: str) -> list[AppliedAction]:
        """Every action in the order it was written, with the tick that used it."""
        return self._actions(person_action.c.plate == plate)

    def new_actions(self, plate: str, after_seq: int) -> list[Action]:
        """Actions written after this one."""
        newer = (person_action.c.plate == plate) & (person_action.c.seq > after_seq)
        return [found.action for found in self._actions(newer)]

    def unapplied_actions(self, plate: str) -> list[Action]:
        """Actions that no tick has used yet, for a start."""
        waiting = (person_action.c.plate == plate) & action_applied.c.at_us.is_(None)
        return [found.action for found in self._actions(waiting)]

    def alarm_states(self, plate: str) -> list[AlarmEvent]:
        """The latest event of every alarm instance, from which a start restores its state."""
        return [row.event for row in self.alarm_list(plate, open_only=False)]

    def alarm_list(self, plate: str | None, *, open_only: bool) -> list[AlarmRow]:
        """Latest event of every (plate, alarm, subject), oldest first; open: not normal."""
        columns = (alarm_event.c.plate, alarm_event.c.alarm, alarm_event.c.subject)
        latest = select(func.max(alarm_event.c.seq)).group_by(*columns)
        query = select(alarm_event).where(alarm_event.c.seq.in_(latest))
        if plate is not None:
            query = query.where(alarm_event.c.plate == plate)
        if open_only:
            query = query.where(alarm_event.c.to_state != str(AlarmState.NORMAL))
        return [_alarm(row) for row in self._all(query.order_by(alarm_event.c.seq))]

    def last_shot(self, plate: str) -> FieldShot | None:
        return self._shot(field_shot.c.plate == plate)

    def shot_before(self, plate: str, at_us: int) -> FieldShot | None:
        """The latest shot at or before a time."""
        return self._shot((field_shot.c.plate == plate) & (field_shot.c.at_us <= at_us))

    def _shot(self, which: ColumnElement[bool]) -> FieldShot | None:
        query = select(field_shot).where(which).order_by(field_shot.c.at_us.desc()).limit(1)
        found = self._all(query)
        return unpack_state(found[0].at_us, found[0].basis, found[0].state) if found else None

    def _actions(self, which: ColumnElement[bool]) -> list[AppliedAction]:
        columns = (person_action, action_applied.c.at_us.label("applied_us"))
        query = select(*columns).outerjoin(action_applied).where(which)
        return [_action(row) for row in self._all(query.order_by(person_action.c.seq))]

    def _all(self, query: Any) -> list[Row[Any]]:
        with storage_errors(self._path), self._engine.begin() as connection:
            return list(connection.execute(query).all())

    def _of_plate(
        self,
        table: Table,
        plate: str,
        from_us: int | None,
        to_us: int | None,
        *then: ColumnElement[Any],
    ) -> Iterator[Row[Any]]:
        query = select(table).where(table.c.plate == plate)
        return self._chunks(query, table, from_us, to_us, (table.c.at_us, *then))

    def _chunks(
        self,
        query: Select[Any],
        table: Table,
        from_us: int | None,
        to_us: int | None,
        order: tuple[ColumnElement[Any], ...],
    ) -> Iterator[Row[Any]]:
        """Rows in order, each chunk ending at a whole instant."""
        at = table.c.at_us
        rest = query if to_us is None else query.where(at < to_us)
        start = from_us
        while True:
            ahead = rest if start is None else rest.where(at >= start)
            with storage_errors(self._path), self._engine.begin() as connection:
                end = _instant_after(connection, ahead, at, self.chunk)
                part = ahead if end is None else ahead.where(at <= end)
                rows = connection.execute(part.order_by(*order)).all()
            yield from rows
            if end is None:
                return
            start = end + 1


def _instant_after(
    connection: Connection, ahead: Select[Any], at: ColumnElement[int], rows: int
) -> int | None:
    """Time of the row that closes a chunk; None if the rest is smaller than one."""
    query = ahead.with_only_columns(at).order_by(at).offset(rows - 1).limit(1)
    return connection.execute(query).scalar()


def _or_nan(value: float | None) -> float:
    return math.nan if value is None else value


def _peak(row: Row[Any]) -> PeakRow:
    stored = {f.name: row._mapping[f.name] for f in fields(PeakRow)}
    missing = {k for k, v in stored.items() if v is None} - _PEAK_OPTIONAL
    return PeakRow(**(stored | dict.fromkeys(missing, math.nan)))


def _action(row: Row[Any]) -> AppliedAction:
    names = ("seq", "at_us", "person", "verb", "alarm", "subject", "reason")
    action = Action(**{name: row._mapping[name] for name in names})
    return AppliedAction(action, row.applied_us)


def _alarm(row: Row[Any]) -> AlarmRow:
    values = dict(row._mapping)
    seq, seen_us, plate = values.pop("seq"), values.pop("seen_us"), values.pop("plate")
    digest = values.pop("hash")
    del values["prev_hash"]
    try:
        values["from_state"] = AlarmState(values["from_state"])
        values["to_state"] = AlarmState(values["to_state"])
    except ValueError as error:
        raise StorageError(f"alarm_event row {seq}: {error}; run platewatch verify") from None
    return AlarmRow(seq, seen_us, plate, AlarmEvent(**values), digest)
