"""Daily digests of readings and peaks, written into the hash-chained log book.

Rows of raw data carry no hash of their own; a finished day is sealed as a whole.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Iterator
from dataclasses import asdict, dataclass
from datetime import UTC, datetime, timedelta
from typing import Any

from sqlalchemy import Connection

from platewatch.adapters.storage_audit import marked_lines, removed_before
from platewatch.adapters.storage_read import Record
from platewatch.adapters.storage_tables import peak, reading

DAY_US = 86_400_000_000
SEALED = "sealed: "
# A day is sealed an hour after its end and covers what arrived in the first ten minutes of
# it: neither a full queue nor a clock that steps back by less can bring a row in between.
SETTLED_US = 3_600_000_000
_ARRIVED_US = 600_000_000
_OLDEST_DAYS = 400
EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


@dataclass(frozen=True, slots=True)
class Kept:
    """Times before which rows may be missing by retention."""

    readings_us: int
    peaks_us: int


@dataclass(frozen=True, slots=True)
class Digest:
    """Number of rows and their SHA-256 (hex)."""

    rows: int
    sha256: str


@dataclass(frozen=True, slots=True)
class Seal:
    """One sealed day of one plate."""

    plate: str
    from_us: int
    to_us: int
    reading: Digest
    peak: Digest


def due_days(record: Record, plate: str, now_us: int, seals: list[Seal]) -> range:
    """Starts of the finished days that are not sealed yet, in microseconds UTC."""
    last_tick_us = max((run.last_tick_us or 0 for run in record.runs(plate)), default=0)
    end = min(now_us - SETTLED_US, last_tick_us) // DAY_US * DAY_US
    done = [seal.to_us for seal in seals if seal.plate == plate]
    start = max(done) if done else _first_day(record, plate, end)
    return range(max(start, end - _OLDEST_DAYS * DAY_US), end, DAY_US)


def seal_note(record: Record, plate: str, from_us: int) -> str:
    """The log-book line for one day: number of rows and SHA-256, for readings and peaks."""
    to_us = from_us + DAY_US
    readings = _digest(_reading_lines(record, plate, from_us, to_us))
    peaks = _digest(_peak_lines(record, plate, from_us, to_us))
    return SEALED + json.dumps(asdict(Seal(plate, from_us, to_us, readings, peaks)))


def sealed_days(connection: Connection) -> list[Seal]:
    found = (_seal(line) for line in marked_lines(connection, SEALED))
    return [seal for seal in found if seal is not None]


def check_seals(record: Record, seals: list[Seal], kept: Kept) -> Iterator[str]:
    """One line for each sealed day whose rows are not those sealed.

    kept: time from which retention has left the readings and the peaks whole
    """
    for seal in seals:
        day = (seal.plate, seal.from_us, seal.to_us)
        if seal.from_us >= kept.readings_us:
            now = _digest(_reading_lines(record, *day))
            yield from _difference("reading", seal, seal.reading, now)
        if seal.from_us >= kept.peaks_us:
            yield from _difference("peak", seal, seal.peak, _digest(_peak_lines(record, *day)))


def kept_since(connection: Connection) -> Kept:
    return Kept(removed_before(connection, reading), removed_before(connection, peak))


def _difference(table: str, seal: Seal, then: Digest, now: Digest) -> Iterator[str]:
    if now != then:
        day = EPOCH + timedelta(microseconds=seal.from_us)
        yield (
            f"{table} rows of plate {seal.plate!r} on {day:%Y-%m-%d} (UTC) are not those "
            f"sealed: {now.rows} rows now, {then.rows} then"
        )


def _seal(line: dict[str, Any]) -> Seal | None:
    """None if the line was tampered with, which its chain shows."""
    try:
        digests = [
            Digest(int(line[k]["rows"]), str(line[k]["sha256"])) for k in ("reading", "peak")
        ]
        return Seal(str(line["plate"]), int(line["from_us"]), int(line["to_us"]), *digests)
    except (KeyError, TypeError, ValueError):
        return None


def _first_day(record: Record, plate: str, otherwise: int) -> int:
    times = (
        next((row.at_us for row in record.reading_rows(plate)), otherwise),
        next((row.at_us for row in record.peaks(plate)), otherwise),
    )
    return min(times) // DAY_US * DAY_US


def _digest(lines: Iterable[str]) -> Digest:
    digest, rows = hashlib.sha256(), 0
    for line in lines:
        digest.update(line.encode("utf-8", "replace"))
        rows += 1
    return Digest(rows, digest.hexdigest())


def _reading_lines(record: Record, plate: str, from_us: int, to_us: int) -> Iterator[str]:
    for row in record.reading_rows(plate, from_us, to_us):
        if row.seen_us < to_us + _ARRIVED_US:
            yield f"{row.at_us},{row.name},{row.unit},{row.value!r},{row.flags},{row.seen_us}\n"


def _peak_lines(record: Record, plate: str, from_us: int, to_us: int) -> Iterator[str]:
    return (f"{row!r}\n" for row in record.peaks(plate, from_us, to_us))
