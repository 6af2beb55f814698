"""A recorded file as rows of text cells, whatever form it has: CSV, columns apart by
white space, or Parquet."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import IO, Any

from platewatch.adapters.logs_columns import WHITESPACE
from platewatch.errors import NoDataError, SettingsError

PARQUET = b"PAR1"
MAGIC = {
    b"SQLite format 3\0": "a database; replay takes it as it is, without a columns map",
    b"\x1f\x8b": "compressed; unpack it first",
    b"PK\x03\x04": "a spreadsheet or archive; save the table as CSV",
}
_ROWS_AT_ONCE = 8192


@dataclass(frozen=True)
class Cells:
    """rows: the first holds the names where `named` or where the file has them
    line: number of the row read last;  whole: how many there are, about
    named: columns have names, whatever is said about a header
    """

    rows: Iterator[list[str]]
    line: Callable[[], int]
    close: Callable[[], None]
    whole: int
    named: bool = False


def open_cells(path: Path, delimiter: str) -> Cells:
    """Open a log.  Raises NoDataError where it is missing or empty, SettingsError where it
    is of a form that cannot be read."""
    try:
        raw = path.open("rb")
    except FileNotFoundError:
        raise NoDataError(f"{path}: no such file") from None
    except OSError as error:
        raise NoDataError(f"{path}: cannot be opened: {error.strerror}") from None
    head = raw.read(4096)
    if head.startswith(PARQUET):
        raw.close()
        return _parquet(path)
    trouble = next((what for magic, what in MAGIC.items() if head.startswith(magic)), "")
    if not trouble and b"\0" in head:
        trouble = "binary or UTF-16; save it as CSV in UTF-8"
    if trouble or not head.strip():
        raw.close()
        if trouble:
            raise SettingsError(f"{path}: is {trouble}")
        raise NoDataError(f"{path}: is empty")
    raw.seek(0)
    whole = sum(block.count(b"\n") for block in iter(lambda: raw.read(1 << 20), b""))
    raw.seek(0)
    file = io.TextIOWrapper(raw, encoding="utf-8-sig", newline="")
    if delimiter != WHITESPACE:
        reader = csv.reader(file, delimiter=delimiter)
        return Cells(reader, lambda: reader.line_num, file.close, whole)
    return Cells(*_split(file), file.close, whole)


def _split(file: IO[str]) -> tuple[Iterator[list[str]], Callable[[], int]]:
    count = 0

    def rows() -> Iterator[list[str]]:
        nonlocal count
        for line in file:
            count += 1
            yield line.split()

    return rows(), lambda: count


def _parquet(path: Path) -> Cells:
    try:
        import pyarrow as arrow
        import pyarrow.parquet as parquet
    except ImportError:
        raise SettingsError(
            f"{path}: is Parquet, which needs pyarrow: install platewatch[parquet]"
        ) from None
    try:
        file = parquet.ParquetFile(path)
    except (OSError, arrow.ArrowException) as error:
        raise SettingsError(f"{path}: not readable as Parquet: {_first_line(error)}") from None
    names = [str(name) for name in file.schema_arrow.names]
    count = 1

    def rows() -> Iterator[list[str]]:
        nonlocal count
        yield names
        try:
            for batch in file.iter_batches(_ROWS_AT_ONCE):
                for row in zip(*(_texts(arrow, column) for column in batch.columns), strict=True):
                    count += 1
                    yield list(row)
        except (OSError, arrow.ArrowException) as error:
            raise SettingsError(
                f"{path}:{count + 1}: not readable as Parquet: {_first_line(error)}"
            ) from None

    return Cells(rows(), lambda: count, file.close, int(file.metadata.num_rows), named=True)


def _texts(arrow: Any, column: Any) -> list[str]:
    """Cells as a CSV would hold them: floats by repr, times in ISO 8601, empty for missing."""
    if arrow.types.is_timestamp(column.type) and column.type.unit == "ns":
        column = column.cast(arrow.timestamp("us", column.type.tz), safe=False)
    return [_text(value) for value in column.to_pylist()]


def _text(value: object) -> str:
    if value is None:
        return ""
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, datetime):
        return value.isoformat()
    return str(value)


def _first_line(error: Exception) -> str:
    return str(error).split("\n")[0]
