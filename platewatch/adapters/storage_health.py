"""What a record tells of the daemon that keeps it."""

from __future__ import annotations

from dataclasses import dataclass

from sqlalchemy import Connection, func, inspect, select

from platewatch.adapters.storage_tables import (
    channel,
    clock_note,
    peak,
    reading,
    refusal,
    run,
)
from platewatch.types import Refused

DAY_US = 86_400_000_000
RECENT = 400  # rows looked at for the last arrival


@dataclass(frozen=True, slots=True)
class ClockNote:
    """A clock that was off or stepped; offset_us: source minus this computer."""

    at_us: int
    offset_us: int
    what: str


@dataclass(frozen=True, slots=True)
class Signs:
    """last_peak_us, last_reading_us: source time;  last_seen_us: arrival of that reading

    clock_notes, refusals: of the last day
    """

    run_no: int | None
    last_peak_us: int | None
    last_reading_us: int | None
    last_seen_us: int | None
    clock_notes: tuple[ClockNote, ...]
    refusals: tuple[Refused, ...]

    def peak_age_s(self, now_us: int) -> float | None:
        """Age of the last peak by this computer's clock, whatever the sources' clock says."""
        if self.last_peak_us is None:
            return None
        ahead_us = 0
        if self.last_reading_us is not None and self.last_seen_us is not None:
            ahead_us = self.last_reading_us - self.last_seen_us
        return max(0.0, (now_us - (self.last_peak_us - ahead_us)) / 1e6)


def signs_of(connection: Connection, plate: str, now_us: int) -> Signs:
    """Read them in one transaction."""
    at_us, seen_us = _last_reading(connection, plate)
    return Signs(
        run_no=connection.execute(select(func.max(run.c.run_no)).filter_by(plate=plate)).scalar(),
        last_peak_us=connection.execute(
            select(func.max(peak.c.at_us)).where(peak.c.plate == plate)
        ).scalar(),
        last_reading_us=at_us,
        last_seen_us=seen_us,
        clock_notes=_clock_notes(connection, plate, now_us - DAY_US),
        refusals=_refusals(connection, plate, now_us - DAY_US),
    )


def _last_reading(connection: Connection, plate: str) -> tuple[int | None, int | None]:
    """Of the newest usable rows, the one that arrived last: its stamp and arrival."""
    mine = select(channel.c.id).where(channel.c.plate == plate)
    query = select(reading.c.at_us, reading.c.seen_us).where(
        reading.c.channel_id.in_(mine), reading.c.flags == 0
    )
    rows = connection.execute(query.order_by(reading.c.at_us.desc()).limit(RECENT)).all()
    last = max(rows, key=lambda row: (row.seen_us, row.at_us), default=None)
    return (None, None) if last is None else (int(last.at_us), int(last.seen_us))


def _clock_notes(connection: Connection, plate: str, after_us: int) -> tuple[ClockNote, ...]:
    query = select(clock_note.c.at_us, clock_note.c.offset_us, clock_note.c.what).where(
        clock_note.c.plate == plate, clock_note.c.at_us >= after_us
    )
    rows = connection.execute(query.order_by(clock_note.c.id)).all()
    return tuple(ClockNote(row.at_us, row.offset_us, row.what) for row in rows)


def _refusals(connection: Connection, plate: str, after_us: int) -> tuple[Refused, ...]:
    if not inspect(connection).has_table(refusal.name):
        return ()  # a record of before there were any
    query = select(refusal).where(refusal.c.plate == plate, refusal.c.last_us >= after_us)
    rows = connection.execute(query.order_by(refusal.c["count"].desc())).mappings().all()
    return tuple(Refused(**{k: v for k, v in row.items() if k != "plate"}) for row in rows)
