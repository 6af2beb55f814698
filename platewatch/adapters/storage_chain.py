"""Hash chains: each row carries the SHA-256 of itself and of the row before."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, Table, select

GENESIS = "0" * 64
_CHUNK = 1000


@dataclass(frozen=True, slots=True)
class ChainHead:
    """The last row of a chain; kept outside the database it proves that no tail was cut."""

    table: str
    seq: int
    hash: str


def row_hash(table: str, row: Mapping[str, object]) -> str:
    """SHA-256 (hex) of the canonical JSON of a row without its own hash.

    Keys sorted, no blanks, ASCII only, floats by their shortest exact form; the name of the
    table is part of it, so that a row cannot be moved to another chain.
    """
    content = {name: value for name, value in row.items() if name != "hash"}
    # default: a tampered cell may hold bytes, which must give a wrong hash and no traceback.
    text = json.dumps(
        {"table": table, **content}, sort_keys=True, separators=(",", ":"), default=repr
    )
    return hashlib.sha256(text.encode("ascii")).hexdigest()


def append(connection: Connection, table: Table, row: Mapping[str, object]) -> int:
    """Add one row and return its number; the caller holds the write lock (BEGIN IMMEDIATE)."""
    head = chain_head(connection, table)
    used = max(head.seq, _highest_number(connection, table))
    full = {name: _storable(value) for name, value in row.items()}
    full |= {"seq": used + 1, "prev_hash": head.hash}
    full["hash"] = row_hash(table.name, full)
    connection.execute(table.insert(), full)
    return used + 1


def chain_head(connection: Connection, table: Table) -> ChainHead:
    query = select(table.c.seq, table.c.hash).order_by(table.c.seq.desc()).limit(1)
    last = connection.execute(query).first()
    return ChainHead(table.name, last.seq, last.hash) if last else ChainHead(table.name, 0, GENESIS)


def check_chain(connection: Connection, table: Table, start: ChainHead) -> Iterator[str]:
    """One line for each place where the chain is broken.

    start: the row before the first one that must be there (number 0 if nothing was removed
    by retention)
    """
    name, seq, last_hash = table.name, start.seq, start.hash
    for row in _rows(connection, table):
        if row["seq"] != seq + 1:
            yield f"{name}: {_missing(seq + 1, row['seq'] - 1)} before row {row['seq']}"
        if row["prev_hash"] != last_hash:
            yield f"{name} row {row['seq']}: does not follow the row before it"
        if row["hash"] != row_hash(name, row):
            yield f"{name} row {row['seq']}: changed after it was written"
        seq, last_hash = row["seq"], row["hash"]
    if _highest_number(connection, table) > seq:
        yield f"{name}: {_missing(seq + 1, _highest_number(connection, table))} at the end"


def check_anchor(connection: Connection, table: Table, anchor: ChainHead) -> Iterator[str]:
    """Compare with a row number and hash that were kept outside the database."""
    query = select(table.c.hash).where(table.c.seq == anchor.seq)
    found = connection.execute(query).scalar()
    if found is None:
        yield f"{table.name}: row {anchor.seq}, known from outside, is missing"
    elif found != anchor.hash:
        yield f"{table.name} row {anchor.seq}: differs from the hash known from outside"


def _missing(first: int, last: int) -> str:
    if last < first:
        return "row numbers out of order"
    return f"row {first} is missing" if first == last else f"rows {first} to {last} are missing"


def _rows(connection: Connection, table: Table) -> Iterator[dict[str, Any]]:
    last: int | None = None
    while True:
        query = select(table).order_by(table.c.seq).limit(_CHUNK)
        rows = connection.execute(query if last is None else query.where(table.c.seq > last)).all()
        yield from (dict(row._mapping) for row in rows)
        if len(rows) < _CHUNK:
            return
        last = rows[-1].seq


def _highest_number(connection: Connection, table: Table) -> int:
    """The highest number SQLite ever gave out in this table."""
    found = connection.exec_driver_sql(
        "SELECT seq FROM sqlite_sequence WHERE name = ?", (table.name,)
    ).scalar()
    return int(found or 0)


def _storable(value: object) -> object:
    """The value exactly as the database gives it back, so that the hash holds."""
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, str):
        return str(value).encode("utf-8", "replace").decode("utf-8")
    return value
