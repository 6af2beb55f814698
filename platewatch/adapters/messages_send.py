"""What platewatch says on the bus, and below which topics; nothing outside its own root."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import msgspec

from platewatch import units
from platewatch.types import AlarmEvent, CauseRow, PeakRow

ROOT = "platewatch"


class _Now(msgspec.Struct, frozen=True):
    degC: float
    sd_K: float
    x_mm: float
    y_mm: float
    zone: str


class _Ahead(_Now, frozen=True):
    in_s: float


class CauseSaid(msgspec.Struct, frozen=True):
    name: str
    place: str
    probability: float


class Peak(msgspec.Struct, frozen=True):
    """Body of platewatch/<plate>/peak; `to_limit_s` are the 5, 50 and 95 % quantiles."""

    at: str
    run: int
    now: _Now
    ahead: _Ahead
    alarm_limit_degC: float | None
    p_over: float | None
    to_limit_s: Sequence[float | None] | None
    causes: tuple[CauseSaid, ...]
    inferred: bool = True


class Alive(msgspec.Struct, frozen=True):
    """Body of platewatch/<plate>/alive; state: alive, lost or stopped."""

    at: str
    run: int
    state: str


class Alarm(msgspec.Struct, frozen=True):
    """Body of platewatch/<plate>/alarm/<alarm>/<subject>."""

    at: str
    run: int
    alarm: str
    subject: str
    place: str
    state: str
    was: str
    priority: str
    value: float | None
    limit_value: float | None
    cause: str
    message: str
    group_no: int


def encode(body: Any) -> bytes:
    """A message body as JSON; a number that is not finite becomes null."""
    return msgspec.json.encode(body)


def topic_of(plate: str, *levels: str) -> str:
    """platewatch/<plate>/...; a level keeps no character that MQTT gives a meaning."""
    return "/".join((ROOT, *(_level(level) for level in (plate, *levels))))


def _level(name: str) -> str:
    return "".join("_" if mark in "/+#$\0" else mark for mark in name) or "_"


def alarm_topic(plate: str, event: AlarmEvent) -> str:
    return topic_of(plate, "alarm", event.alarm, event.subject)


def peak_message(
    row: PeakRow,
    run: int,
    to_limit_s: Sequence[float | None] | None = None,
    causes: Sequence[CauseRow] = (),
) -> bytes:
    """The peak row of a tick, with the quantiles of the time to the limit and the causes."""
    return encode(
        Peak(
            at=units.iso(row.at_us),
            run=run,
            now=_Now(row.now_degC, row.now_sd_K, row.now_x_mm, row.now_y_mm, row.now_zone),
            ahead=_Ahead(
                row.ahead_degC,
                row.ahead_sd_K,
                row.ahead_x_mm,
                row.ahead_y_mm,
                row.ahead_zone,
                row.ahead_in_s,
            ),
            alarm_limit_degC=row.limit_degC,
            p_over=row.p_over,
            to_limit_s=to_limit_s,
            causes=tuple(CauseSaid(c.cause, c.place, c.probability) for c in causes),
        )
    )


def alive_message(state: str, at_us: int, run: int) -> bytes:
    return encode(Alive(units.iso(at_us), run, state))


def alarm_message(event: AlarmEvent, run: int) -> bytes:
    return encode(
        Alarm(
            at=units.iso(event.at_us),
            run=run,
            alarm=event.alarm,
            subject=event.subject,
            place=event.place,
            state=event.to_state,
            was=event.from_state,
            priority=event.priority,
            value=event.value,
            limit_value=event.limit_value,
            cause=event.cause,
            message=event.message,
            group_no=event.group_no,
        )
    )
