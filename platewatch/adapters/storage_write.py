"""Rows of readings and outcomes, written inside a transaction that the caller holds."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence

from sqlalchemy import Connection, select

from platewatch.adapters.storage_chain import append
from platewatch.adapters.storage_state import pack_state
from platewatch.adapters.storage_tables import (
    action_applied,
    alarm_event,
    alarm_limit_probability,
    basis,
    cause_probability,
    channel,
    field_shot,
    gap,
    insert_sql,
    log_note,
    peak,
    reading,
    refusal,
    zone_power,
)
from platewatch.types import (
    FILLED,
    AlarmEvent,
    BatchEvent,
    FieldShot,
    Outcome,
    PeakRow,
    Reading,
    Refused,
)

Ids = Mapping[str, int]

# The first value of an instant stays, unless it was refused and a good one comes after it:
# a source whose clock was ahead and is put right stamps those seconds once more.
_READING = insert_sql(
    reading,
    known="(at_us, channel_id) DO UPDATE SET value = excluded.value, flags = excluded.flags, "
    "seen_us = excluded.seen_us WHERE reading.flags & 2 AND NOT excluded.flags & 2",
)
_PEAK = insert_sql(peak)
_POWER = insert_sql(zone_power)
_LIMIT = insert_sql(alarm_limit_probability)
_CAUSE = insert_sql(cause_probability)
_BASIS = insert_sql(basis)
_SHOT = insert_sql(field_shot)
_APPLIED = insert_sql(action_applied)
# A gap that goes on is one row whose end moves.
_GAP = insert_sql(gap, known="(plate, from_us, what) DO UPDATE SET to_us = excluded.to_us")
# Kinds that were there already are counted on.
_REFUSAL = insert_sql(
    refusal,
    known="(plate, topic, channel, reason) DO UPDATE SET count = count + excluded.count, "
    "last_us = excluded.last_us, detail = excluded.detail, excerpt = excluded.excerpt",
)
# A gap that a backlog filled is the one that was open before, with another word on it.
_FILLED = "DELETE FROM gap WHERE plate = ? AND from_us = ? AND what <> ?"
_BATCH = (
    "INSERT INTO batch (at_us, plate, event, detail) VALUES (?, ?, ?, ?) ON CONFLICT DO NOTHING"
)


def channel_ids(
    connection: Connection, plate: str, names: Iterable[str], units: Mapping[str, str]
) -> dict[str, int]:
    """Number of each channel, given out at its first reading (or its first with a new unit)."""
    ids: dict[str, int] = {}
    for name in names:
        key = {"plate": plate, "name": name, "unit": units.get(name, "")}
        found = connection.execute(select(channel.c.id).filter_by(**key)).scalar()
        if found is None:
            found = connection.execute(channel.insert(), key).inserted_primary_key[0]  # type: ignore[index]
        ids[name] = int(found)
    return ids


def write_readings(connection: Connection, ids: Ids, readings: Sequence[Reading]) -> int:
    """Store readings, keeping those already there; the number of rows that are new."""
    if not readings:
        return 0
    rows = [(r.at_us, ids[r.channel], float(r.value), int(r.flags), r.seen_us) for r in readings]
    return connection.exec_driver_sql(_READING, rows).rowcount


def write_events(connection: Connection, plate: str, events: Sequence[BatchEvent]) -> None:
    _insert(connection, _BATCH, [(e.at_us, plate, e.event, e.detail) for e in events])


def write_refusals(connection: Connection, plate: str, refusals: Sequence[Refused]) -> None:
    rows = [
        (plate, r.topic, r.channel, r.reason, r.count, r.first_us, r.last_us, r.detail, r.excerpt)
        for r in refusals
    ]
    _insert(connection, _REFUSAL, rows)


def write_outcomes(
    connection: Connection, plate: str, outcomes: Sequence[Outcome], description_sha256: str
) -> None:
    """Everything the ticks produced, in tick order."""
    _insert(connection, _PEAK, [_peak_row(plate, o.peak) for o in outcomes if o.peak])
    powers = [
        (p.at_us, plate, p.zone, float(p.called_W), float(p.inferred_W), float(p.sd_W))
        for o in outcomes
        for p in o.zone_powers
    ]
    _insert(connection, _POWER, powers)
    limits = [
        (row.at_us, plate, row.alarm_limit, float(row.p_over), *_median_first(row.to_limit_s))
        for o in outcomes
        for row in o.limits
    ]
    _insert(connection, _LIMIT, limits)
    causes = [
        (row.at_us, plate, row.cause, row.place, float(row.probability))
        for o in outcomes
        for row in o.causes
    ]
    _insert(connection, _CAUSE, causes)
    shots = [o.shot for o in outcomes if o.shot]
    _insert(connection, _BASIS, [(h, plate, description_sha256) for h in {s.basis for s in shots}])
    _insert(connection, _SHOT, [_shot_row(plate, shot) for shot in shots])
    gaps = [(plate, g.from_us, g.what, g.to_us) for o in outcomes for g in o.gaps]
    _insert(connection, _GAP, gaps)
    filled = [(plate, g.from_us, g.what) for o in outcomes for g in o.gaps if g.what == FILLED]
    _insert(connection, _FILLED, filled)
    _insert(connection, _APPLIED, [(seq, o.at_us) for o in outcomes for seq in o.applied])
    for outcome in outcomes:
        _write_chained(connection, plate, outcome)


def write_note(connection: Connection, plate: str, at_us: int, person: str, text: str) -> int:
    row = {"at_us": at_us, "plate": plate, "person": person, "text": text}
    return append(connection, log_note, row)


def _write_chained(connection: Connection, plate: str, outcome: Outcome) -> None:
    for event in outcome.alarm_events:
        append(connection, alarm_event, _alarm_row(plate, outcome.at_us, event))
    for text in outcome.notes:
        write_note(connection, plate, outcome.at_us, "", text)


def _insert(connection: Connection, sql: str, rows: Sequence[tuple[object, ...]]) -> None:
    if rows:
        connection.exec_driver_sql(sql, list(rows))


def _peak_row(plate: str, row: PeakRow) -> tuple[object, ...]:
    return (
        row.at_us,
        plate,
        float(row.now_degC),
        float(row.now_sd_K),
        float(row.now_x_mm),
        float(row.now_y_mm),
        row.now_zone,
        float(row.ahead_degC),
        float(row.ahead_sd_K),
        float(row.ahead_in_s),
        float(row.ahead_x_mm),
        float(row.ahead_y_mm),
        row.ahead_zone,
        _optional(row.limit_degC),
        _optional(row.p_over),
        _optional(row.to_limit_s),
        row.cause,
    )


def _shot_row(plate: str, shot: FieldShot) -> tuple[object, ...]:
    return (shot.at_us, plate, shot.basis, pack_state(shot))


def _alarm_row(plate: str, seen_us: int, event: AlarmEvent) -> dict[str, object]:
    return {
        "at_us": int(event.at_us),
        "seen_us": int(seen_us),
        "plate": plate,
        "alarm": event.alarm,
        "subject": event.subject,
        "place": event.place,
        "from_state": str(event.from_state),
        "to_state": str(event.to_state),
        "priority": event.priority,
        "value": _optional(event.value),
        "limit_value": _optional(event.limit_value),
        "limit_version": int(event.limit_version),
        "cause": event.cause,
        "group_no": int(event.group_no),
        "person": event.person,
        "reason": event.reason,
        "message": event.message,
    }


def _median_first(quantiles: tuple[float | None, ...]) -> tuple[float | None, ...]:
    early, median, late = (_optional(value) for value in quantiles)
    return median, early, late


def _optional(value: float | None) -> float | None:
    """A float or NULL; SQLite has no NaN and would store NULL silently anyway."""
    return None if value is None or math.isnan(value) else float(value)
