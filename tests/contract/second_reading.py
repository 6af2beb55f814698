"""A second reading of bus messages, written from the documents alone and for plainness.

RFC 8259 by Python's json with every leniency refused, RFC 8428 record by record; the
daemon reads with msgspec.  Used by the tests of hostile messages: what is accepted there
must be what stands here.
"""

from __future__ import annotations

import json
import re
from datetime import UTC, datetime, timedelta
from typing import Any

NOW = 1_772_352_000_000_000  # 2026-03-01T08:00:00Z
RANGE = {"degC": (-273.15, 3000.0), "K": (0.0, 3273.15), "1": (-0.001, 1.001)}
UNITS = {
    "sensor/T1": "degC",
    "sensor/T2": "K",
    "zone/Z1/duty": "1",
    "zone/Z1/setpoint": "degC",
    "surround/a": "degC",
}
DEEPEST = 16
JSON_NUMBER = re.compile(r"-?(0|[1-9][0-9]*)(\.[0-9]+)?([eE][+-]?[0-9]+)?")
EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
Accepted = set[tuple[str, float, int]]  # channel, value, us


class NotSo(Exception):
    """The message, or this part of it, says nothing that may be used."""


def of_number(payload: bytes, channel: str) -> Accepted:
    """A bare JSON number, stamped with its arrival."""
    try:
        text = payload.decode("utf-8").strip(" \t\n\r")
    except UnicodeDecodeError:
        return set()
    if not JSON_NUMBER.fullmatch(text):
        return set()
    return keep([(channel, float(text), NOW)])


def of_json(payload: bytes, channel: str) -> Accepted:
    """{"ts": ms, "data": {"v": number}}."""
    try:
        found = tree(payload)
        at_us = counted(found["ts"], 1000)
        return keep([(channel, plain(found["data"]["v"]), at_us)])
    except (NotSo, KeyError, TypeError):
        return set()


def of_flat(payload: bytes) -> Accepted:
    """One time, many channels."""
    try:
        found = tree(payload)
        if not isinstance(found, dict):
            raise NotSo
        stamps = [key for key in ("at", "at_ms", "at_us") if key in found]
        if len(stamps) > 1:
            raise NotSo
        at_us = NOW
        if stamps:
            given = found.pop(stamps[0])
            read = {"at": written, "at_ms": lambda v: counted(v, 1000), "at_us": counted}
            at_us = read[stamps[0]](given)
    except NotSo:
        return set()
    values = []
    for name, value in found.items():
        try:
            values.append((name, plain(value), at_us))
        except NotSo:
            continue
    return keep(values)


TEXTS, NUMBERS = ("bn", "n"), ("bt", "bv", "v", "t", "s")
OTHER_TEXTS = ("u", "bu", "vs", "vd")


def of_senml(payload: bytes) -> Accepted:
    """A pack of records, base values resolved in their order."""
    try:
        records = tree(payload)
        if not isinstance(records, list):
            raise NotSo
        for record in records:
            check_record(record)
    except NotSo:
        return set()
    base: dict[str, Any] = {"bn": "", "bt": 0.0, "bv": 0.0, "bu": ""}
    values = []
    for record in records:
        base |= {k: v for k, v in record.items() if k in base and v is not None and v != ""}
        if record.get("bu") == "":
            base["bu"] = ""
        if record.get("v") is None:
            continue
        try:
            values.append(resolve(base, record))
        except NotSo:
            continue
    return keep(values)


def check_record(record: Any) -> None:
    if not isinstance(record, dict) or any(name.endswith("_") for name in record):
        raise NotSo
    for name, value in record.items():
        if name in TEXTS and not isinstance(value, str):
            raise NotSo
        if name in OTHER_TEXTS and not isinstance(value, str | None):
            raise NotSo
        if name in NUMBERS and value is not None:
            plain(value)
        if name == "vb" and not isinstance(value, bool | None):
            raise NotSo


def resolve(base: dict[str, Any], record: dict[str, Any]) -> tuple[str, float, int]:
    name = base["bn"] + record.get("n", "")
    name = name.removeprefix("plates/p/")
    seconds = float(base["bt"]) + float(record.get("t") or 0.0)
    at_us = NOW
    if seconds >= 2**28:
        at_us = counted(seconds, 1_000_000)
    elif seconds > 0:
        raise NotSo
    elif seconds < 0:
        at_us = counted(NOW + round(max(seconds, -1e12) * 1e6))
    value = float(base["bv"]) + float(record["v"])
    unit = record.get("u") if record.get("u") is not None else base["bu"]
    return name, in_unit(value, unit or "", UNITS.get(name, "")), at_us


def in_unit(value: float, given: str, wanted: str) -> float:
    if not given:
        return value
    ways = {
        ("Cel", "degC"): lambda v: v,
        ("K", "K"): lambda v: v,
        ("K", "degC"): lambda v: v - 273.15,
        ("Cel", "K"): lambda v: v + 273.15,
        ("/", "1"): lambda v: v,
        ("%", "1"): lambda v: v / 100,
    }
    if (given, wanted) not in ways:
        raise NotSo
    return ways[given, wanted](value)


def keep(values: list[tuple[str, float, int]]) -> Accepted:
    """What its channel can carry, no second value of one instant, nothing of the future."""
    found: dict[tuple[str, int], float] = {}
    for channel, value, at_us in values:
        if channel not in UNITS or at_us > NOW + 120_000_000:
            continue
        low, high = RANGE[UNITS[channel]]
        if low <= value <= high:  # false for NaN and infinities
            found.setdefault((channel, at_us), value)
    return {(channel, value, at_us) for (channel, at_us), value in found.items()}


def tree(payload: bytes) -> Any:
    """Strict JSON; raises NotSo."""
    try:
        found = json.loads(
            payload.decode("utf-8"),
            parse_constant=no_constant,
            object_pairs_hook=distinct,
            parse_float=finite,
        )
        json.dumps(found, ensure_ascii=False).encode("utf-8")  # fails on half a surrogate pair
    except (ValueError, RecursionError):
        raise NotSo from None
    if depth(found) > DEEPEST:
        raise NotSo
    return found


def no_constant(text: str) -> None:
    raise NotSo


def finite(text: str) -> float:
    if abs(float(text)) == float("inf"):
        raise NotSo
    return float(text)


def distinct(members: list[tuple[str, Any]]) -> dict[str, Any]:
    if len({name for name, _ in members}) < len(members):
        raise NotSo
    return dict(members)


def depth(found: Any) -> int:
    inner = found.values() if isinstance(found, dict) else found
    return 1 + max(map(depth, inner), default=0) if isinstance(found, dict | list) else 0


def plain(value: Any) -> float:
    """A JSON number, never true, text or null."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise NotSo
    try:
        return float(value)
    except OverflowError:
        raise NotSo from None


def counted(value: Any, ticks: int = 1) -> int:
    """Microseconds from a count; from 2000 to 2100."""
    if isinstance(value, bool) or not isinstance(value, int | float) or abs(value) > 1e18:
        raise NotSo
    return within(round(value * ticks))


def written(value: Any) -> int:
    """Microseconds from ISO 8601 with an offset."""
    try:
        stamp = datetime.fromisoformat(value.strip())
        return within((stamp - EPOCH) // timedelta(microseconds=1))
    except (AttributeError, TypeError, ValueError, OverflowError):
        raise NotSo from None


def within(at_us: int) -> int:
    if not 946_684_800_000_000 <= at_us <= 4_102_444_800_000_000:
        raise NotSo
    return at_us
