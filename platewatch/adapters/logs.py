"""Recorded readings from files, streamed row by row, and the same written again.

The csv module reads here rather than pandas: a row must keep its line number, a bad
cell must not change the type of a column, and times stay integers.
"""

from __future__ import annotations

import csv
import json
import re
from collections import Counter, deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from platewatch import units
from platewatch.adapters.logs_columns import (
    BATCH,
    OWN_TIMES,
    ColumnRule,
    ColumnsMap,
    NoOffset,
    ReadTime,
    TimeRule,
    convert,
    did_you_mean,
    load_columns,
    time_reader,
)
from platewatch.adapters.logs_files import open_cells
from platewatch.errors import NoDataError, SettingsError
from platewatch.types import BatchEvent, Flag, Reading

__all__ = ["LogReader", "LogRefusal", "LogReport", "LogRow", "load_columns", "read_log"]

REMEMBERED_STAMPS = 65_536
NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?\Z", re.ASCII)


@dataclass(frozen=True, slots=True)
class LogRefusal:
    """A cell (or, with no column, a row) that was not used."""

    line: int
    column: str
    reason: str
    excerpt: str

    def __str__(self) -> str:
        place = f", column {self.column}" if self.column else ""
        return f"line {self.line}{place}: {self.reason}; found {self.excerpt!r}"


@dataclass(frozen=True, slots=True)
class LogRow:
    """One line of the log; seen_us of its readings is at_us (arrived in time)."""

    line: int
    at_us: int | None
    readings: tuple[Reading, ...] = ()
    event: BatchEvent | None = None
    refusals: tuple[LogRefusal, ...] = ()


@dataclass(frozen=True)
class LogReport:
    """duplicates: rows with a stamp seen before;  backward: steps back in time
    reasons: how often each reason for a refusal;  late: counted by the ticker"""

    rows: int
    readings: int
    duplicates: int
    refused: int
    backward: int
    largest_step_back_us: int
    late: int
    reasons: tuple[tuple[str, int], ...]


@dataclass(frozen=True)
class _Column:
    place: int
    name: str
    channel: str
    unit: str
    value: Callable[[float], float] | None


class LogReader:
    """Iterates over a log once, in file order; `report` tells what came by so far.

    whole: how many rows there are, about
    """

    def __init__(
        self,
        path: Path,
        channels: Mapping[str, str],
        columns: ColumnsMap | None,
        offset: str,
        ignore_unknown: bool,
    ) -> None:
        self.path = path
        self._cells = open_cells(path, columns.delimiter if columns else ",")
        self.whole = self._cells.whole
        try:
            self._layout(channels, columns, offset, ignore_unknown)
        except UnicodeDecodeError:
            self._cells.close()
            raise SettingsError(f"{path}: not UTF-8 text; save it as CSV in UTF-8") from None
        except csv.Error as error:
            self._cells.close()
            raise SettingsError(f"{path}: not readable as CSV: {error}") from None
        except Exception:
            self._cells.close()
            raise
        self._rows = self._readings = self._duplicates = self._backward = self._back_us = 0
        self._last: int | None = None
        self._reasons: Counter[str] = Counter()
        self._stamps: set[int] = set()
        self._order: deque[int] = deque()

    def __iter__(self) -> Iterator[LogRow]:
        try:
            for cells in self._lines:
                if any(cells):
                    yield self._row(cells, self._cells.line())
        except csv.Error as error:
            raise SettingsError(f"{self._here()}: not readable as CSV: {error}") from None
        except UnicodeDecodeError:
            raise SettingsError(f"{self._here()}: not UTF-8 text") from None
        finally:
            self._cells.close()
        if not self._rows:
            raise NoDataError(f"{self.path}: holds a header and no rows")

    def report(self, late: int = 0) -> LogReport:
        return LogReport(
            rows=self._rows,
            readings=self._readings,
            duplicates=self._duplicates,
            refused=self._reasons.total(),
            backward=self._backward,
            largest_step_back_us=self._back_us,
            late=late,
            reasons=tuple(self._reasons.most_common()),
        )

    def _layout(
        self,
        channels: Mapping[str, str],
        columns: ColumnsMap | None,
        offset: str,
        ignore_unknown: bool,
    ) -> None:
        self._lines = self._cells.rows
        if columns is not None and not columns.header and not self._cells.named:
            first = next(self._lines, None)
            header = [str(i + 1) for i in range(len(first or ()))]
            self._lines = _again(first, self._lines)
        else:
            header = [name.strip() for name in next(self._lines, [])]
        if not header:
            raise NoDataError(f"{self.path}: is empty")
        _check_header(self.path, header)
        if columns is None:
            rule, rules = _own_rules(self.path, header, channels, offset, ignore_unknown)
        else:
            rule, rules = _mapped_rules(self.path, header, columns, channels, offset)
        self._width = len(header)
        self._time_place, self._time_name = header.index(rule.column), rule.column
        self._read_time: ReadTime = time_reader(rule)
        self._columns = [
            _Column(
                header.index(r.column),
                r.column,
                r.channel,
                channels.get(r.channel, ""),
                None if r.channel == BATCH else convert(r, channels[r.channel]),
            )
            for r in rules
        ]

    def _here(self) -> str:
        return f"{self.path}:{self._cells.line() + 1}"

    def _row(self, cells: list[str], line: int) -> LogRow:
        self._rows += 1
        at_us, refusal = self._time(cells, line)
        if at_us is None:
            return self._refused(LogRow(line, None, refusals=(refusal,) if refusal else ()))
        self._note(at_us)
        readings: list[Reading] = []
        refusals: list[LogRefusal] = []
        event: BatchEvent | None = None
        if len(cells) > self._width:
            extra = f"{len(cells)} cells under {self._width} headings"
            refusals.append(LogRefusal(line, "", extra, cells[self._width]))
        for column in self._columns:
            cell = cells[column.place].strip() if column.place < len(cells) else ""
            if not cell:
                continue
            found = _event(cell, at_us) if column.value is None else _reading(column, cell, at_us)
            if isinstance(found, str):
                refusals.append(LogRefusal(line, column.name, found, cell[:60]))
            elif isinstance(found, Reading):
                readings.append(found)
            else:
                event = found
        self._readings += len(readings)
        return self._refused(LogRow(line, at_us, tuple(readings), event, tuple(refusals)))

    def _time(self, cells: list[str], line: int) -> tuple[int | None, LogRefusal | None]:
        text = cells[self._time_place].strip() if self._time_place < len(cells) else ""
        try:
            return self._read_time(text), None
        except NoOffset:
            raise SettingsError(
                f"{self.path}:{line}: time {text!r} has no offset; write it as {text}Z or "
                f"{text}+01:00, or state the offset that the whole file was written in"
            ) from None
        except (ValueError, OverflowError) as error:
            return None, LogRefusal(line, self._time_name, f"unreadable time ({error})", text[:60])

    def _note(self, at_us: int) -> None:
        """Count steps back and stamps that came before."""
        if self._last is not None and at_us < self._last:
            self._backward += 1
            self._back_us = max(self._back_us, self._last - at_us)
        self._last = at_us
        if at_us in self._stamps:
            self._duplicates += 1
            return
        self._stamps.add(at_us)
        self._order.append(at_us)
        if len(self._order) > REMEMBERED_STAMPS:
            self._stamps.discard(self._order.popleft())

    def _refused(self, row: LogRow) -> LogRow:
        for refusal in row.refusals:
            self._reasons[refusal.reason.split(" (")[0]] += 1
        return row


def read_log(
    path: Path,
    channels: Mapping[str, str],
    *,
    columns: ColumnsMap | None = None,
    offset: str = "",
    ignore_unknown: bool = False,
) -> LogReader:
    """Open a log; iterate over the answer for its rows.

    channels: channel -> its unit, as in the `channel` table
    columns: how to read a foreign file;  offset: "+01:00", "Z", ... for stamps without
    ignore_unknown: pass over columns that name no channel instead of refusing the file

    Raises NoDataError for a missing or empty file, SettingsError for one that is neither
    CSV nor Parquet, has doubled or unknown columns or times without an offset.
    """
    return LogReader(path, channels, columns, offset, ignore_unknown)


def _reading(column: _Column, cell: str, at_us: int) -> Reading | str:
    if not NUMBER.match(cell):
        return "not a number"
    assert column.value is not None
    value = column.value(float(cell))
    if not units.plausible(value, column.unit):
        low, high = units.PLAUSIBLE.get(column.unit, (-1e300, 1e300))
        unit = "" if column.unit == "1" else f" {column.unit}"
        return f"outside {low:g} to {high:g}{unit}"
    return Reading(at_us, column.channel, value, at_us, Flag.NONE)


def _event(cell: str, at_us: int) -> BatchEvent | str:
    try:
        found = json.loads(cell)
    except (ValueError, RecursionError):
        return "not a JSON object"
    if not isinstance(found, dict) or not isinstance(found.get("event"), str):
        return 'a batch object needs "event"'
    if "at" in found:
        try:
            at_us = units.from_iso(str(found["at"]))
        except ValueError as error:
            return f"unreadable time ({error})"
    return BatchEvent(at_us, found["event"], cell)


def _again(first: list[str] | None, rest: Iterator[list[str]]) -> Iterator[list[str]]:
    if first is not None:
        yield first
    yield from rest


def _check_header(path: Path, header: Sequence[str]) -> None:
    for name, times in Counter(header).items():
        if times > 1 and name:
            raise SettingsError(f"{path}: column {name!r} is there {times} times; keep one")
    if len(header) == 1 and any(mark in header[0] for mark in ";\t"):
        raise SettingsError(
            f"{path}: looks separated by semicolons or tabs; use a columns map with delimiter"
        )


def _own_rules(
    path: Path,
    header: Sequence[str],
    channels: Mapping[str, str],
    offset: str,
    ignore_unknown: bool,
) -> tuple[TimeRule, list[ColumnRule]]:
    """A wide log of our own: time first, then channel names."""
    first, *others = header
    if first not in OWN_TIMES:
        raise SettingsError(
            f"{path}: the first column is {first!r}; a log begins with at, at_ms or at_us. "
            "Describe other files in a columns map"
        )
    unknown = [name for name in others if name not in channels and name != BATCH]
    if unknown and not ignore_unknown:
        named = ", ".join(f"{name!r}{did_you_mean(name, channels)}" for name in unknown[:5])
        more = f" and {len(unknown) - 5} more" if len(unknown) > 5 else ""
        raise SettingsError(f"{path}: unknown columns: {named}{more}")
    rules = [ColumnRule(name, name) for name in others if name in channels or name == BATCH]
    if not rules:
        raise NoDataError(f"{path}: has no column of this plate")
    return TimeRule(first, OWN_TIMES[first], offset), rules


def _mapped_rules(
    path: Path,
    header: Sequence[str],
    columns: ColumnsMap,
    channels: Mapping[str, str],
    offset: str,
) -> tuple[TimeRule, list[ColumnRule]]:
    for name in (columns.time.column, *(rule.column for rule in columns.columns)):
        if name not in header:
            raise SettingsError(f"{path}: has no column {name!r}{did_you_mean(name, header)}")
    for rule in columns.columns:
        if rule.channel not in channels and rule.channel != BATCH:
            hint = did_you_mean(rule.channel, channels)
            raise SettingsError(
                f"column {rule.column!r}: {rule.channel!r} is no channel of this plate{hint}"
            )
    time = columns.time
    if offset and not time.offset:
        time = TimeRule(time.column, time.format, offset, time.origin_us)
    return time, list(columns.columns)
