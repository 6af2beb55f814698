"""Readings as a wide log that reads back exactly."""

from __future__ import annotations

import csv
import json
import os
from collections.abc import Iterable, Iterator, Sequence
from itertools import groupby
from pathlib import Path

from platewatch import units
from platewatch.errors import StorageError
from platewatch.types import BatchEvent, Reading

BATCH = "batch"
Row = dict[str, int | float | str]  # at_us, channels, batch; what is missing is not there


def write_wide_log(
    path: Path,
    readings: Iterable[Reading],
    *,
    channels: Sequence[str] | None = None,
    events: Iterable[BatchEvent] = (),
) -> int:
    """Write readings and batch events as CSV; answers the number of rows.

    readings: in the order to be kept; neighbours of one stamp share a row
    channels: the columns; None takes those that occur, and holds all readings at once
    events: in order of time, each in the first row stamped as late as itself, or alone

    Numbers are written by repr, so reading them back gives the same floats.  The file
    appears whole or not at all; no cell can begin like a formula of a spreadsheet, for
    channels begin with their kind, events with a brace, and all else is a number.
    """
    if channels is None:
        readings = list(readings)
        channels = sorted({reading.channel for reading in readings})
    waiting = list(events)
    names = ["at_us", *channels, *([BATCH] if waiting else [])]
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    rows = 0
    try:
        with part.open("w", encoding="utf-8", newline="") as file:
            writer = csv.DictWriter(file, names, restval="", lineterminator="\n")
            writer.writeheader()
            for row in wide_rows(readings, waiting):
                writer.writerow({name: _cell(value) for name, value in row.items()})
                rows += 1
            file.flush()
            os.fsync(file.fileno())
        os.replace(part, path)
    except OSError as error:
        raise StorageError(f"{path}: cannot be written: {error.strerror}") from None
    finally:
        part.unlink(missing_ok=True)
    return rows


def wide_rows(readings: Iterable[Reading], events: Iterable[BatchEvent] = ()) -> Iterator[Row]:
    """The rows of a wide log, in the order of the readings."""
    waiting = sorted(events, key=lambda event: event.at_us)
    for row in _rows(readings):
        at_us = int(row["at_us"])
        while waiting and waiting[0].at_us < at_us:
            yield _event_row(waiting.pop(0))
        if waiting and waiting[0].at_us == at_us:
            row[BATCH] = _body(waiting.pop(0))
        yield row
    for event in waiting:
        yield _event_row(event)


def _cell(value: float | str) -> str:
    return repr(value) if isinstance(value, float) else str(value)


def _rows(readings: Iterable[Reading]) -> Iterator[Row]:
    """One row for neighbours of one stamp; a channel that comes twice opens another."""
    for at_us, group in groupby(readings, key=lambda reading: reading.at_us):
        row: Row = {"at_us": int(at_us)}
        for reading in group:
            if reading.channel in row:
                yield row
                row = {"at_us": int(at_us)}
            row[reading.channel] = float(reading.value)
        yield row


def _event_row(event: BatchEvent) -> Row:
    return {"at_us": event.at_us, BATCH: _body(event)}


def _body(event: BatchEvent) -> str:
    """The object as received, with the time at which it counts."""
    found = json.loads(event.detail) if event.detail else {}
    return json.dumps({**found, "event": event.event, "at": units.iso(event.at_us)})
