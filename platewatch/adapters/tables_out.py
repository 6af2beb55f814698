"""Tables for other programs: CSV (RFC 4180, UTF-8) or, by the file's ending, Parquet."""

from __future__ import annotations

import csv
import os
from collections.abc import Callable, Iterable, Iterator, Sequence
from itertools import chain, islice
from pathlib import Path
from typing import Any

from platewatch.errors import SettingsError, StorageError

Rows = Iterable[Sequence[object]]

_BATCH = 65_536
# A spreadsheet takes a cell that begins like this for a formula. The guard character is put
# before cells that begin with itself too, so that removing one gives back the text.
_FORMULA = ("=", "+", "-", "@", "\t", "\r")
_GUARD = "'"


def write_table(
    path: Path, columns: Sequence[str], rows: Rows, kinds: Sequence[type] | None = None
) -> int:
    """Write rows and return their number; the file appears whole or not at all.

    Cells are numbers, texts, booleans or None. Floats are written so that reading them gives
    the same bits. kinds: int, float, str or bool of each column, needed in Parquet only where
    the first rows do not show it.
    Raises StorageError if the folder is missing, not writable or full, SettingsError if
    Parquet is asked for without its extra.
    """
    write = _parquet_writer(kinds) if path.suffix == ".parquet" else _write_csv
    _check_folder(path)
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        count = write(part, columns, rows)
        os.replace(part, path)
    except OSError as error:
        raise StorageError(f"{path}: cannot be written ({error.strerror or error})") from error
    finally:
        part.unlink(missing_ok=True)
    return count


def unguarded(cell: str) -> str:
    """The text that a CSV cell stood for before the formula guard."""
    return cell[1:] if cell.startswith(_GUARD) else cell


def _check_folder(path: Path) -> None:
    folder = path.resolve().parent
    if not folder.is_dir():
        raise StorageError(f"{path}: folder {folder} does not exist; create it first")
    if path.is_dir():
        raise StorageError(f"{path}: is a folder; name a file in it")
    if not os.access(folder, os.W_OK | os.X_OK, effective_ids=True):
        raise StorageError(f"{path}: folder {folder} is not writable for this user")


def _write_csv(path: Path, columns: Sequence[str], rows: Rows) -> int:
    count = 0
    with open(path, "w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\r\n")
        writer.writerow([_cell(name) for name in columns])
        for row in rows:
            writer.writerow([_cell(value) for value in row])
            count += 1
        _flush(file.fileno(), file.flush)
    return count


def _flush(number: int, flush: Callable[[], None]) -> None:
    flush()
    os.fsync(number)


def _cell(value: object) -> str:
    if value is None:
        return ""
    if isinstance(value, str):
        return _GUARD + value if value.startswith((*_FORMULA, _GUARD)) else str(value)
    if isinstance(value, float):
        # float() first: numpy's own repr is not a number.
        return repr(float(value))
    return str(value).lower() if isinstance(value, bool) else str(value)


def _parquet_writer(kinds: Sequence[type] | None) -> Callable[[Path, Sequence[str], Rows], int]:
    try:
        import pyarrow as arrow
        import pyarrow.parquet as parquet
    except ImportError:
        raise SettingsError(
            "Parquet needs pyarrow: install platewatch[parquet], or end the file name in .csv"
        ) from None

    def write(path: Path, columns: Sequence[str], rows: Rows) -> int:
        batches = _batches(rows)
        first = next(batches, [])
        schema = _schema(arrow, columns, first, kinds)
        count = 0
        with parquet.ParquetWriter(path, schema) as writer:
            for batch in chain([first], batches):
                writer.write_table(_arrow_table(arrow, schema, batch))
                count += len(batch)
        return count

    return write


def _batches(rows: Rows) -> Iterator[list[Sequence[object]]]:
    left = iter(rows)
    while batch := list(islice(left, _BATCH)):
        yield batch


def _schema(
    arrow: Any, columns: Sequence[str], first: list[Sequence[object]], kinds: Sequence[type] | None
) -> Any:
    if kinds is None:
        kinds = [_kind([row[i] for row in first]) for i in range(len(columns))]
    types = {
        bool: arrow.bool_(),
        int: arrow.int64(),
        float: arrow.float64(),
        str: arrow.string(),
    }
    return arrow.schema([(name, types[kind]) for name, kind in zip(columns, kinds, strict=True)])


def _kind(values: list[object]) -> type:
    """Kind of a column; one without any value counts as numbers, our nullable columns."""
    found = [value for value in values if value is not None]
    for kind in (bool, str):
        if found and all(isinstance(value, kind) for value in found):
            return kind
    if found and all(isinstance(value, int) for value in found):
        return int
    return float


def _arrow_table(arrow: Any, schema: Any, batch: list[Sequence[object]]) -> Any:
    parts = []
    for i, column in enumerate(schema):
        try:
            parts.append(arrow.array([row[i] for row in batch], type=column.type))
        except (arrow.ArrowInvalid, arrow.ArrowTypeError) as error:
            raise StorageError(
                f"column {column.name!r} does not hold {column.type} throughout ({error}); "
                "write CSV instead"
            ) from error
    return arrow.Table.from_arrays(parts, schema=schema)
