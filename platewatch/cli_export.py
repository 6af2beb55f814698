"""Stored rows as tables: CSV or, by the file's ending, Parquet."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import astuple, dataclass, fields
from itertools import chain
from pathlib import Path
from typing import TypeVar

from platewatch import compose
from platewatch.errors import NoDataError, SettingsError
from platewatch.types import AlarmEvent, PeakRow, Reading
from platewatch.units import iso

Row = TypeVar("Row")
ENDINGS = (".csv", ".parquet")


@dataclass(frozen=True)
class Wish:
    """Whose rows, to which file, from which moment to before which."""

    plate: str
    out: Path
    from_us: int | None = None
    to_us: int | None = None

    def __post_init__(self) -> None:
        if self.out.suffix not in ENDINGS:
            raise SettingsError(f"{self.out}: let the name end in {' or '.join(ENDINGS)}")


def readings(store: compose.Store, wish: Wish) -> int:
    """The readings that were used and the batch events, as the wide log that `replay` reads."""
    used = _some(_used(store, wish), wish)
    channels = sorted(store.units(wish.plate))
    # What platewatch noted about its own record ("record") is no matter of the plant's log.
    events = [e for e in store.events(wish.plate, wish.from_us, wish.to_us) if e.event != "record"]
    if wish.out.suffix == ".csv":
        return compose.write_wide_log(wish.out, used, channels=channels, events=events)
    names = ["at_us", *channels, *(["batch"] if events else [])]
    kinds: list[type] = [int, *[float] * len(channels), *([str] if events else [])]
    rows = ([row.get(name) for name in names] for row in compose.wide_rows(used, events))
    return compose.write_table(wish.out, names, rows, kinds)


def _used(store: compose.Store, wish: Wish) -> Iterator[Reading]:
    found = store.read_readings(wish.plate, wish.from_us, wish.to_us)
    return (reading for reading in found if reading.usable)


def peaks(store: compose.Store, wish: Wish) -> int:
    """The hottest place now and ahead, a row a tick."""
    names = [f.name for f in fields(PeakRow)]
    found = store.peaks(wish.plate, wish.from_us, wish.to_us)
    return _table(wish, names, (astuple(row) for row in found), _peak_kinds(names))


def _peak_kinds(names: list[str]) -> list[type]:
    texts = {"now_zone", "ahead_zone", "cause"}
    return [int if name == "at_us" else str if name in texts else float for name in names]


def alarm_events(store: compose.Store, wish: Wish) -> int:
    """Every change of state of every alarm."""
    names = [f.name for f in fields(AlarmEvent)]
    numbers = {"value": float, "limit_value": float}
    whole = {"at_us": int, "group_no": int, "limit_version": int}
    kinds = [whole.get(name, numbers.get(name, str)) for name in names]
    found = store.alarm_events(wish.plate, wish.from_us, wish.to_us)
    return _table(
        wish,
        ["seq", *names],
        ([row.seq, *(_plain(v) for v in astuple(row.event))] for row in found),
        [int, *kinds],
    )


def _plain(value: object) -> object:
    return str(value) if isinstance(value, str) else value


def field(store: compose.Store, wish: Wish, at_us: int, description: Path | None) -> int:
    """The inferred field at a moment: x_mm, y_mm, degC, sd_K of every cell."""
    found = compose.field_at(store, wish.plate, at_us, description)
    columns = ["x_mm", "y_mm", "degC", "sd_K"]
    cells = zip(
        found.x_mm.tolist(),
        found.y_mm.tolist(),
        found.degC.tolist(),
        found.sd_K.tolist(),
        strict=True,
    )
    return compose.write_table(wish.out, columns, cells, [float] * 4)


def _table(
    wish: Wish, names: list[str], rows: Iterator[Sequence[object]], kinds: list[type]
) -> int:
    """With the time as ISO 8601 beside the integer, for people."""
    place = names.index("at_us")

    def with_iso() -> Iterator[list[object]]:
        for row in _some(rows, wish):
            at_us = row[place]
            assert isinstance(at_us, int)
            yield [iso(at_us), *row]

    return compose.write_table(wish.out, ["at", *names], with_iso(), [str, *kinds])


def _some(rows: Iterator[Row], wish: Wish) -> Iterator[Row]:
    """The rows; raises NoDataError before the first where there is none."""
    first = next(rows, None)
    if first is None:
        raise NoDataError(f"nothing of plate {wish.plate!r} in this time; no file was written")
    return chain([first], rows)
