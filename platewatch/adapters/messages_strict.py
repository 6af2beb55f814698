"""What JSON leaves open and two readers may take differently is refused here.

A name said twice in one object: some readers keep the first value, some the last
(RFC 8259 section 4 calls the behaviour unpredictable), so neither is a measurement.
"""

from __future__ import annotations

import json
from typing import Any

from platewatch.adapters.messages_reasons import Reason, Unreadable

MOST_DEEP = 16  # objects and lists within each other


def refuse_doubled(payload: bytes, found: Any) -> None:
    """Raises Unreadable where an object of `payload` names a member twice, or nests too deep.

    found: `payload` decoded, in which a doubled name is there once.  Outside texts every
    colon stands for one member, so counting them tells, where nothing is escaped, without
    decoding again.
    """
    colons = _colons(found, MOST_DEEP)
    if b"\\" in payload:
        try:
            json.loads(payload, object_pairs_hook=_distinct)
        except ValueError as error:
            raise Unreadable(Reason.NOT_JSON, str(error)) from None
    elif payload.count(b":") != colons:
        raise Unreadable(Reason.DOUBLED, "an object names a member twice")


def _colons(found: Any, room: int) -> int:
    """Colons that the JSON text of a value holds; raises Unreadable below `room` levels."""
    if isinstance(found, str):
        return found.count(":")
    if not isinstance(found, dict | list):
        return 0
    if not room:
        raise Unreadable(Reason.NOT_JSON, f"nested too deeply, more than {MOST_DEEP} levels")
    inner = found.values() if isinstance(found, dict) else found
    own = len(found) + sum(name.count(":") for name in found) if isinstance(found, dict) else 0
    return own + sum(_colons(v, room - 1) for v in inner if type(v) in (str, dict, list))


def _distinct(members: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(members)
    if len(found) != len(members):
        raise Unreadable(Reason.DOUBLED, "an object names a member twice")
    return found
