"""What the connection hands on: messages as they arrived, and what happened to it."""

from __future__ import annotations

from typing import NamedTuple


class Token(NamedTuple):
    """What acknowledges one message; void after the connection it came on."""

    generation: int
    mid: int
    qos: int


class Arrival(NamedTuple):
    """One message exactly as received."""

    topic: str
    payload: bytes
    retain: bool
    dup: bool
    token: Token
    seen_us: int


class BusEvent(NamedTuple):
    """what: connected, no broker, refused, subscription refused, lost, taken over,
    session forgotten, sessions not kept, queue full, silent, renewed, callback failed,
    network thread restarted."""

    what: str
    text: str
    at_us: int
