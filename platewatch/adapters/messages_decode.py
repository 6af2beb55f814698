"""Payload bytes of the four declared shapes as plain samples; knows no channels.

Every mistake of a payload is an `Unreadable`, which `messages.Routes` turns into a
counted refusal.  Nothing is guessed: a text is no number, true is no number, and a
time has the unit that was declared.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import msgspec

from platewatch import units
from platewatch.adapters.messages_reasons import Reason, Unreadable
from platewatch.adapters.messages_strict import refuse_doubled

__all__ = ["Reason", "Sample", "Unreadable", "Unusable"]

EARLIEST_US = 946_684_800_000_000  # 2000-01-01: an older stamp has the wrong unit
LATEST_US = 4_102_444_800_000_000  # 2100-01-01, likewise
SENML_ABSOLUTE_S = 2**28  # RFC 8428 section 4.5.3: below it a time is relative to now
SENML_VERSION = 10


@dataclass(frozen=True, slots=True)
class Sample:
    """One value found in a payload.

    at_us: source time, None where the payload has none;  unit: SenML's, else empty
    by_arrival: its time depends on when it arrived, so a second delivery has another
    """

    name: str
    value: float
    at_us: int | None
    unit: str = ""
    by_arrival: bool = False


@dataclass(frozen=True, slots=True)
class Unusable:
    """A record of a pack that holds no usable number; the others still count."""

    name: str
    error: Unreadable


_number = msgspec.json.Decoder(float)


def read_number(payload: bytes) -> float:
    """A bare JSON number."""
    try:
        return _number.decode(payload)
    except msgspec.ValidationError as error:
        raise Unreadable(Reason.NOT_A_NUMBER, str(error)) from None
    except ValueError as error:  # DecodeError, UnicodeDecodeError
        raise Unreadable(Reason.NOT_A_NUMBER, f"no bare number ({error})") from None


def read_any(payload: bytes) -> Any:
    """Any JSON value; strict: no NaN, no Infinity, no number beyond a double, no name twice."""
    try:
        found = msgspec.json.decode(payload)
    except RecursionError:
        raise Unreadable(Reason.NOT_JSON, "nested too deeply") from None
    except ValueError as error:
        raise Unreadable(Reason.NOT_JSON, str(error)) from None
    refuse_doubled(payload, found)
    return found


def read_object(payload: bytes) -> dict[str, Any]:
    found = read_any(payload)
    if not isinstance(found, dict):
        raise Unreadable(Reason.NOT_JSON, "no JSON object")
    return found


def json_text(found: dict[str, Any]) -> str:
    """The object as one line of JSON, members in the order received."""
    return msgspec.json.encode(found).decode()


def number_of(value: Any, where: str) -> float:
    """A JSON number as float; text, true, null, objects are refused."""
    if type(value) is float:
        return value
    if type(value) is int:
        try:
            return float(value)
        except OverflowError:
            pass
    raise Unreadable(Reason.NOT_A_NUMBER, f"{where} is {_short(value)}, not a number")


def at_path(found: Any, path: str) -> Any:
    """The value at a key path such as "data.v" or "values.0"; a key with dots counts first."""
    if isinstance(found, dict) and path in found:
        return found[path]
    for key in path.split("."):
        if isinstance(found, dict) and key in found:
            found = found[key]
        elif isinstance(found, list) and key.isdecimal() and int(key) < len(found):
            found = found[int(key)]
        else:
            raise Unreadable(Reason.NO_VALUE, f"no {path!r} in the object")
    return found


_SCALE = {"s": 1_000_000, "ms": 1_000, "us": 1}


def time_us(value: Any, unit: str) -> int:
    """A stamp in the declared unit (iso, s, ms, us) as integer microseconds UTC."""
    if unit == "iso":
        if not isinstance(value, str):
            raise Unreadable(Reason.BAD_TIME, f"{_short(value)} is no ISO 8601 text")
        try:
            at_us = units.from_iso(value)
        except (ValueError, OverflowError) as error:
            raise Unreadable(Reason.BAD_TIME, str(error)) from None
    elif type(value) is int:
        at_us = value * _SCALE[unit]
    elif type(value) is float and abs(value) < LATEST_US:
        at_us = round(value * _SCALE[unit])
    else:
        raise Unreadable(Reason.BAD_TIME, f"{_short(value)} is no time in {unit}")
    if not EARLIEST_US <= at_us <= LATEST_US:
        raise Unreadable(
            Reason.BAD_TIME, f"{_short(value)} is not between 2000 and 2100; is it in {unit}?"
        )
    return at_us


def read_json(payload: bytes, value: str, time: str, time_unit: str) -> Sample:
    """One value of a JSON object by key path, and its time if a path is declared."""
    found = read_any(payload)
    at_us = time_us(at_path(found, time), time_unit) if time else None
    return Sample("", number_of(at_path(found, value), repr(value)), at_us)


_FLAT_TIMES = {"at": "iso", "at_ms": "ms", "at_us": "us"}


def read_flat(
    payload: bytes, time: str = "", time_unit: str = ""
) -> tuple[int | None, dict[str, Any]]:
    """One time and the other members, still unjudged; null members are left out.

    time: key of the stamp in `time_unit`; else "at" (ISO), "at_ms" or "at_us".
    """
    found = read_object(payload)
    keys = {time: time_unit} if time else _FLAT_TIMES
    stamps = [time_us(found.pop(key), unit) for key, unit in keys.items() if key in found]
    if len(stamps) > 1 or (time and not stamps):
        raise Unreadable(Reason.BAD_TIME, f"needs exactly one of {', '.join(keys)}")
    return (
        stamps[0] if stamps else None,
        {name: value for name, value in found.items() if value is not None},
    )


class _Record(msgspec.Struct):
    """The members of RFC 8428 that carry numbers; the others are only recognised."""

    bn: str = ""
    bt: float | None = None
    bu: str | None = None
    bv: float | None = None
    bver: int | None = None
    n: str = ""
    u: str | None = None
    v: float | None = None
    t: float | None = None
    vs: str | None = None
    vb: bool | None = None
    vd: str | None = None
    s: float | None = None


_pack = msgspec.json.Decoder(list[_Record])


def read_senml(payload: bytes, seen_us: int) -> list[Sample | Unusable]:
    """The records of a SenML pack (RFC 8428), base values resolved.

    A time below 2**28 is relative to arrival, so it is no source time: at_us is then
    arrival plus the time, and `at_us is None` only for a record without any time.
    """
    try:
        records = _pack.decode(payload)
    except RecursionError:
        raise Unreadable(Reason.NOT_JSON, "nested too deeply") from None
    except msgspec.ValidationError as error:
        raise Unreadable(Reason.NOT_A_NUMBER, f"no SenML pack: {error}") from None
    except ValueError as error:
        raise Unreadable(Reason.NOT_JSON, str(error)) from None
    # Strict about what the typed decoder passes over.
    _refuse_must_understand(read_any(payload))
    return list(_resolve(records, seen_us))


def _refuse_must_understand(records: list[dict[str, Any]]) -> None:
    """RFC 8428 section 4.4: an unknown member ending in "_" may not be passed over."""
    for name in (name for record in records for name in record if name.endswith("_")):
        raise Unreadable(Reason.NOT_JSON, f"SenML member {name!r} must be understood and is not")


def _resolve(records: list[_Record], seen_us: int) -> Iterator[Sample | Unusable]:
    base = _Record(bt=0.0, bv=0.0)
    for record in records:
        base = _with_bases(base, record)
        name = base.bn + record.n
        if record.v is None:
            others = (record.vs, record.vb, record.vd, record.s, record.t, record.n or None)
            if any(other is not None for other in others):
                reason = Unreadable(Reason.NOT_A_NUMBER, f"record {name!r} has no number v")
                yield Unusable(name, reason)
            continue
        try:
            yield _sample(name, base, record, record.v, seen_us)
        except Unreadable as error:
            yield Unusable(name, error)


def _with_bases(base: _Record, record: _Record) -> _Record:
    if record.bver is not None and record.bver > SENML_VERSION:
        raise Unreadable(Reason.NOT_JSON, f"SenML version {record.bver} is not known")
    return _Record(
        bn=record.bn or base.bn,
        bt=base.bt if record.bt is None else record.bt,
        bu=base.bu if record.bu is None else record.bu,
        bv=base.bv if record.bv is None else record.bv,
    )


def _sample(name: str, base: _Record, record: _Record, v: float, seen_us: int) -> Sample:
    seconds = (base.bt or 0.0) + (record.t or 0.0)
    at_us: int | None = None
    if seconds >= SENML_ABSOLUTE_S:
        at_us = time_us(seconds, "s")
    elif seconds > 0:
        raise Unreadable(Reason.FUTURE, f"record {name!r} is {seconds:g} s ahead")
    elif seconds < 0:
        at_us = time_us(seen_us + round(max(seconds, -1e12) * 1e6), "us")
    value = (base.bv or 0.0) + v
    unit = record.u if record.u is not None else base.bu or ""
    return Sample(name, value, at_us, unit, by_arrival=seconds < SENML_ABSOLUTE_S)


def _short(value: Any) -> str:
    if isinstance(value, dict):
        return "an object"
    if isinstance(value, list):
        return "a list"
    text = repr(value)
    return text if len(text) <= 40 else text[:37] + "..."
