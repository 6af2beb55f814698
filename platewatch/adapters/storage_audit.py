"""What `platewatch verify` checks: the file, the hash chains, the stored descriptions."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, Table, select

from platewatch.adapters.storage_chain import (
    GENESIS,
    ChainHead,
    chain_head,
    check_anchor,
    check_chain,
)
from platewatch.adapters.storage_tables import CHAINS, description, log_note

CAUTION = (
    "A chain whose tail was cut, or that was rewritten as a whole, cannot be told from an "
    "honest one by the database alone: compare the last row numbers and hashes with those on "
    "the shift reports."
)
REMOVED = "removed by retention: "
_SHOWN = 50


@dataclass(frozen=True)
class Verification:
    """findings: one line each, empty if all is well;  heads: last row of each chain."""

    findings: tuple[str, ...]
    heads: tuple[ChainHead, ...]
    caution: str = CAUTION

    @property
    def ok(self) -> bool:
        return not self.findings


def verify_record(connection: Connection, anchors: Sequence[ChainHead]) -> Verification:
    """Read everything once, in one transaction."""
    findings = [*_file_findings(connection), *_description_findings(connection)]
    for table in CHAINS:
        findings += _limited(check_chain(connection, table, chain_start(connection, table)))
        for anchor in anchors:
            if anchor.table == table.name and anchor.seq:
                findings += check_anchor(connection, table, anchor)
    heads = tuple(chain_head(connection, table) for table in CHAINS)
    return Verification(tuple(findings), heads)


def removal_note(table: Table, **what: object) -> str:
    """Text of the log-book line that says what retention took from a table."""
    return REMOVED + json.dumps({"table": table.name, **what})


def chain_start(connection: Connection, table: Table) -> ChainHead:
    """The last row that retention removed, as the log book has it; number 0 if none.

    Only alarm events are ever removed, and only from the beginning; actions and the log book
    stay for good, so this note is itself under a chain.
    """
    for found in reversed(marked_lines(connection, REMOVED)):
        seq = found.get("to_seq")
        if found.get("table") == table.name and isinstance(seq, int):
            return ChainHead(table.name, seq, str(found.get("hash")))
    return ChainHead(table.name, 0, GENESIS)


def removed_before(connection: Connection, table: Table) -> int:
    """Rows stamped earlier than this may be missing by retention; 0 if it never ran."""
    lines = marked_lines(connection, REMOVED)
    times = [line.get("before_us") for line in lines if line.get("table") == table.name]
    return max((time for time in times if isinstance(time, int)), default=0)


def marked_lines(connection: Connection, mark: str) -> list[dict[str, Any]]:
    """Log-book lines of the program that begin with this mark, decoded, in their order."""
    written = log_note.c.text.startswith(mark, autoescape=True) & (log_note.c.person == "")
    query = select(log_note.c.text).where(written).order_by(log_note.c.seq)
    lines = [_decoded(text, mark) for text in connection.execute(query).scalars()]
    return [line for line in lines if line is not None]


def _decoded(text: object, mark: str) -> dict[str, Any] | None:
    """None if the line was tampered with, which its chain shows."""
    try:
        found = json.loads(str(text).removeprefix(mark))
    except ValueError:
        return None
    return found if isinstance(found, dict) else None


def _file_findings(connection: Connection) -> Iterator[str]:
    for (line,) in connection.exec_driver_sql("PRAGMA integrity_check(20)"):
        if line != "ok":
            yield f"database file: {line}"
    for row in connection.exec_driver_sql("PRAGMA foreign_key_check").fetchmany(20):
        yield f"{row[0]}: a row refers to a missing row of {row[2]}"


def _description_findings(connection: Connection) -> Iterator[str]:
    for row in connection.execute(select(description)):
        if hashlib.sha256(row.content).hexdigest() != row.sha256:
            yield f"description {row.sha256[:12]}: changed after it was written"


def _limited(lines: Iterator[str]) -> list[str]:
    found = list(lines)
    if len(found) <= _SHOWN:
        return found
    return [*found[:_SHOWN], f"… and {len(found) - _SHOWN} more"]
