"""What the columns of a recorded log mean: our own wide logs, or a map for any other.

A map is a TOML file:

    delimiter = ","           # or ";", "\\t", "whitespace"
    header = true             # false: columns are called 1, 2, 3, ...
    [time]
    column = "timestamp"
    format = "iso"            # iso, s, ms, us, or a pattern such as "%d.%m.%Y %H:%M:%S"
    offset = "+01:00"         # for stamps that carry none
    origin = "2026-03-01T08:00:00Z"   # for s, ms, us counted from a start
    [[column]]
    column = "value"          # its name in the file
    name = "sensor/T1"        # the channel it becomes
    unit = "degF"             # of the file; left out: that of the channel
    scale = 0.1               # value = cell * scale + offset, in `unit`
    offset = 0.0
"""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Callable, Collection, Iterable, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone
from decimal import Decimal, InvalidOperation
from pathlib import Path
from typing import Any

from platewatch import units
from platewatch.errors import SettingsError

BATCH = "batch"
OWN_TIMES = {"at": "iso", "at_ms": "ms", "at_us": "us"}
WHITESPACE = "whitespace"
EARLIEST_US, LATEST_US = 0, 4_102_444_800_000_000  # 1970 to 2100
_TICKS = {"s": 1_000_000, "ms": 1_000, "us": 1}

ReadTime = Callable[[str], int]


@dataclass(frozen=True)
class ColumnRule:
    """One column of a foreign file; scale and offset act in `unit` ("" as the channel)."""

    column: str
    channel: str
    unit: str = ""
    scale: float = 1.0
    offset: float = 0.0


@dataclass(frozen=True)
class TimeRule:
    column: str
    format: str = "iso"
    offset: str = ""
    origin_us: int = 0


@dataclass(frozen=True)
class ColumnsMap:
    """How to read a foreign log; columns that it does not name are passed over."""

    time: TimeRule
    columns: tuple[ColumnRule, ...]
    delimiter: str = ","
    header: bool = True


def load_columns(path: Path) -> ColumnsMap:
    """Read a columns map.  Raises SettingsError naming the key and what to write."""
    try:
        found = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise SettingsError(f"{path}: cannot be read: {error.strerror}") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise SettingsError(f"{path}: not valid TOML: {error}") from None
    where = str(path)
    _check_keys(where, found, ("delimiter", "header", "time", "column"))
    time = _time_rule(f"{where}: time", found.get("time"))
    entries = found.get("column")
    if not isinstance(entries, list) or not entries:
        raise SettingsError(f'{where}: needs one [[column]] at least, with column and name = "..."')
    columns = tuple(_column_rule(f"{where}: column[{i + 1}]", e) for i, e in enumerate(entries))
    delimiter = found.get("delimiter", ",")
    if delimiter != WHITESPACE and (not isinstance(delimiter, str) or len(delimiter) != 1):
        raise SettingsError(f'{where}: delimiter {delimiter!r}: one character, or "{WHITESPACE}"')
    return ColumnsMap(time, columns, delimiter, bool(found.get("header", True)))


def _time_rule(where: str, table: Any) -> TimeRule:
    if not isinstance(table, dict) or not isinstance(table.get("column"), str):
        raise SettingsError(f'{where}: is missing; add [time] with column = "..."')
    _check_keys(where, table, ("column", "format", "offset", "origin"))
    form, offset = table.get("format", "iso"), table.get("offset", "")
    if form not in ("iso", *_TICKS) and "%" not in str(form):
        raise SettingsError(
            f'{where}.format: {form!r}; write iso, s, ms, us or a pattern like "%d.%m.%Y %H:%M"'
        )
    if offset:
        parse_offset(offset, f"{where}.offset")
    origin_us = 0
    if "origin" in table:
        try:
            origin_us = units.from_iso(str(table["origin"]))
        except ValueError as error:
            raise SettingsError(f"{where}.origin: {error}") from None
    return TimeRule(table["column"], form, offset, origin_us)


def _column_rule(where: str, table: Any) -> ColumnRule:
    if not isinstance(table, dict):
        raise SettingsError(f"{where}: write [[column]] tables")
    _check_keys(where, table, ("column", "name", "unit", "scale", "offset"))
    for key in ("column", "name"):
        if not isinstance(table.get(key), str):
            raise SettingsError(f'{where}.{key}: is missing; add {key} = "..."')
    for key in ("scale", "offset"):
        if type(table.get(key, 1.0)) not in (int, float):
            raise SettingsError(f"{where}.{key}: {table[key]!r} is not a number")
    return ColumnRule(
        table["column"],
        table["name"],
        str(table.get("unit", "")),
        float(table.get("scale", 1.0)),
        float(table.get("offset", 0.0)),
    )


def _check_keys(where: str, table: Mapping[str, Any], known: Collection[str]) -> None:
    for key in table:
        if key not in known:
            raise SettingsError(f"{where}: unknown key {key!r}{did_you_mean(key, known)}")


def did_you_mean(name: str, known: Iterable[str]) -> str:
    close = difflib.get_close_matches(name, list(known), 1, 0.6)
    return f"; did you mean {close[0]}?" if close else ""


def parse_offset(text: str, where: str) -> timezone:
    """An offset such as +01:00, -0330, Z or UTC as a time zone."""
    if text in ("Z", "UTC"):
        return UTC
    try:
        stamp = datetime.strptime(text, "%z")
    except (ValueError, TypeError):
        raise SettingsError(f"{where}: {text!r} is no offset; write +hh:mm or Z") from None
    return timezone(stamp.utcoffset() or timedelta(0))


class NoOffset(ValueError):
    """A stamp without an offset where none was given for the file."""


def time_reader(rule: TimeRule) -> ReadTime:
    """How to turn a cell into integer microseconds UTC; the reader raises ValueError."""
    if rule.format in _TICKS:
        return _counted(_TICKS[rule.format], rule.origin_us)
    zone = parse_offset(rule.offset, "offset") if rule.offset else None
    if rule.format == "iso":
        return lambda text: _checked(_since_epoch(datetime.fromisoformat(text), zone))
    return lambda text: _checked(_since_epoch(datetime.strptime(text, rule.format), zone))


def _counted(ticks: int, origin_us: int) -> ReadTime:
    """Counts of s, ms or us, exact: no float on the way."""

    def read(text: str) -> int:
        if text.isascii() and text.isdecimal():
            return _checked(origin_us + int(text) * ticks)
        try:
            return _checked(origin_us + round(Decimal(text) * ticks))
        except (InvalidOperation, OverflowError):
            raise ValueError(f"{text!r} is not a number") from None

    return read


def _since_epoch(stamp: datetime, zone: timezone | None) -> int:
    if stamp.tzinfo is None:
        if zone is None:
            raise NoOffset(f"{stamp} has no offset")
        stamp = stamp.replace(tzinfo=zone)
    delta = stamp - units.EPOCH
    return (delta.days * 86_400 + delta.seconds) * 1_000_000 + delta.microseconds


def _checked(at_us: int) -> int:
    if not EARLIEST_US <= at_us <= LATEST_US:
        raise ValueError("is not between 1970 and 2100; is the unit of time right?")
    return at_us


def convert(rule: ColumnRule, channel_unit: str) -> Callable[[float], float]:
    """Cell number to the channel's own unit.  Raises SettingsError where they do not fit."""
    scale, offset, given = rule.scale, rule.offset, rule.unit
    if not given or given == channel_unit:
        return lambda cell: cell * scale + offset
    temperatures = [unit.value for unit in units.TemperatureUnit]
    if given in temperatures and channel_unit in temperatures:
        source, target = units.TemperatureUnit(given), units.TemperatureUnit(channel_unit)
        return lambda cell: units.from_degC(units.to_degC(cell * scale + offset, source), target)
    if {given, channel_unit} == {"1", "%"}:
        factor = 100.0 if channel_unit == "%" else 0.01
        return lambda cell: (cell * scale + offset) * factor
    raise SettingsError(
        f"column {rule.column!r}: {given!r} cannot become {channel_unit}, the unit of "
        f"{rule.channel}; use scale and offset and leave unit out"
    )
