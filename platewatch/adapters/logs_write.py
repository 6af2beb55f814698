"""Readings as a wide CSV log that reads back exactly."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterable, Iterator, Sequence
from itertools import groupby
from pathlib import Path

from platewatch import units
from platewatch.errors import StorageError
from platewatch.types import BatchEvent, Reading

Cells = dict[str, str]


def write_wide_log(
    path: Path,
    readings: Iterable[Reading],
    *,
    channels: Sequence[str] | None = None,
    events: Iterable[BatchEvent] = (),
) -> int:
    """Write readings and batch events; answers the number of rows.

    readings: in the order to be kept; neighbours of one stamp share a row
    channels: the columns; None takes those that occur, and holds all readings at once
    events: in order of time, each in the first row stamped as late as itself, or alone

    Numbers are written by repr, so reading them back gives the same floats.
    """
    if channels is None:
        readings = list(readings)
        channels = sorted({reading.channel for reading in readings})
    waiting = sorted(events, key=lambda event: event.at_us)
    names = ["at_us", *channels, *(["batch"] if waiting else [])]
    rows = 0
    try:
        with path.open("w", encoding="utf-8", newline="") as file:
            writer = csv.DictWriter(file, names, restval="", lineterminator="\n")
            writer.writeheader()
            for cells in _with_events(_rows(readings), waiting):
                writer.writerow(cells)
                rows += 1
    except OSError as error:
        raise StorageError(f"{path}: cannot be written: {error.strerror}") from None
    return rows


def _rows(readings: Iterable[Reading]) -> Iterator[Cells]:
    """One row for neighbours of one stamp; a channel that comes twice opens another."""
    for at_us, group in groupby(readings, key=lambda reading: reading.at_us):
        cells: Cells = {"at_us": str(at_us)}
        for reading in group:
            if reading.channel in cells:
                yield cells
                cells = {"at_us": str(at_us)}
            cells[reading.channel] = repr(float(reading.value))
        yield cells


def _with_events(rows: Iterable[Cells], waiting: list[BatchEvent]) -> Iterator[Cells]:
    for cells in rows:
        at_us = int(cells["at_us"])
        while waiting and waiting[0].at_us < at_us:
            yield _event_row(waiting.pop(0))
        if waiting and waiting[0].at_us == at_us:
            cells["batch"] = _body(waiting.pop(0))
        yield cells
    while waiting:
        yield _event_row(waiting.pop(0))


def _event_row(event: BatchEvent) -> Cells:
    return {"at_us": str(event.at_us), "batch": _body(event)}


def _body(event: BatchEvent) -> str:
    """The object as received, with the time at which it counts."""
    found = json.loads(event.detail) if event.detail else {}
    return json.dumps({**found, "event": event.event, "at": units.iso(event.at_us)})
