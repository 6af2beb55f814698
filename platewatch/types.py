"""Values that every part of platewatch shares: readings in, outcomes out."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import IntFlag, StrEnum

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


class Flag(IntFlag):
    """What is known about a stored reading; anything but 0 and BACKLOG is not used."""

    NONE = 0
    LATE = 1  # stamped before the last closed tick
    REFUSED = 2  # not a finite number in the channel's range
    BACKLOG = 4  # arrived after an outage, used in its own tick
    RETAINED = 8  # last known value of the broker, never live
    MAYBE_DUPLICATE = 16  # redelivered without a source time
    FUTURE = 32  # stamped further ahead of its arrival than a clock may be; also REFUSED


USABLE = Flag.BACKLOG
_UNUSABLE = ~int(USABLE)


@dataclass(frozen=True, slots=True)
class Reading:
    """One value of one channel, as received.

    at_us: source time, integer microseconds UTC;  seen_us: arrival
    channel: bus name without the plate, e.g. "sensor/T1", "zone/Z1/duty"
    value: in the channel's own unit
    """

    at_us: int
    channel: str
    value: float
    seen_us: int
    flags: Flag = Flag.NONE

    @property
    def usable(self) -> bool:
        return not int(self.flags) & _UNUSABLE  # as plain integers: flags are slow to combine


@dataclass(frozen=True, slots=True)
class Refused:
    """One kind of thing that was received and not used, and how often."""

    topic: str
    channel: str
    reason: str
    count: int
    first_us: int
    last_us: int
    detail: str
    excerpt: str


@dataclass(frozen=True, slots=True)
class Action:
    """What a person asked for, in the order it was written down."""

    seq: int
    at_us: int
    person: str
    verb: str  # "ack"
    alarm: str
    subject: str
    reason: str = ""


@dataclass(frozen=True, slots=True)
class BatchEvent:
    """Something production told us: start, step, load-on, load-off, end.

    "record" is platewatch's own word on its record, see `monitor.record_room`.
    """

    at_us: int
    event: str
    detail: str = ""  # the JSON object as received


@dataclass(frozen=True, slots=True)
class Tick:
    """Everything that one time step of the estimator may use.

    at_us: end of the step; readings are stamped in (at_us - dt_us, at_us] and
    ordered by (at_us, channel).
    """

    at_us: int
    dt_us: int
    readings: tuple[Reading, ...] = ()
    actions: tuple[Action, ...] = ()
    events: tuple[BatchEvent, ...] = ()
    backlog: bool = False


@dataclass(frozen=True)
class Gaussian:
    """mean (n,), cov (n, n)."""

    mean: Array
    cov: Array


class AlarmState(StrEnum):
    """The states of ANSI/ISA-18.2 and IEC 62682, by their stored names."""

    NORMAL = "normal"
    UNACKNOWLEDGED = "unacknowledged"
    ACKNOWLEDGED = "acknowledged"
    RETURNED_UNACKNOWLEDGED = "returned_unacknowledged"
    LATCHED_UNACKNOWLEDGED = "latched_unacknowledged"
    LATCHED_ACKNOWLEDGED = "latched_acknowledged"
    SHELVED = "shelved"
    SUPPRESSED = "suppressed"
    OUT_OF_SERVICE = "out_of_service"


@dataclass(frozen=True, slots=True)
class PeakRow:
    """The hottest place now and within the horizon, as stored each tick."""

    at_us: int
    now_degC: float
    now_sd_K: float
    now_x_mm: float
    now_y_mm: float
    now_zone: str
    ahead_degC: float
    ahead_sd_K: float
    ahead_in_s: float
    ahead_x_mm: float
    ahead_y_mm: float
    ahead_zone: str
    limit_degC: float | None
    p_over: float | None
    to_limit_s: float | None  # median; None when it is not expected within the horizon
    cause: str


@dataclass(frozen=True, slots=True)
class ZonePowerRow:
    at_us: int
    zone: str
    called_W: float
    inferred_W: float
    sd_W: float


@dataclass(frozen=True, slots=True)
class LimitRow:
    """Probability of passing one alarm limit within the horizon, and when."""

    at_us: int
    alarm_limit: str
    p_over: float
    to_limit_s: tuple[float | None, float | None, float | None]  # 5, 50, 95 %


@dataclass(frozen=True, slots=True)
class CauseRow:
    """One credible cause; place: the zones or thermocouples it is about."""

    at_us: int
    cause: str
    place: str
    probability: float


@dataclass(frozen=True, slots=True)
class AlarmEvent:
    """One change of state of one alarm (plate, alarm, subject)."""

    at_us: int
    alarm: str
    subject: str
    place: str
    from_state: AlarmState
    to_state: AlarmState
    priority: str
    value: float | None
    limit_value: float | None
    cause: str
    message: str
    person: str = ""
    reason: str = ""
    group_no: int = 0
    limit_version: int = 1


@dataclass(frozen=True)
class FieldShot:
    """The estimator's state, enough to restart or to draw the field again.

    mean (n,) float64;  cov (n, n), stored as a float32 triangle
    drive (k,): the known part (heater outputs, last inputs) beside the Gaussian
    basis: hash of the basis that gives the state its meaning
    """

    at_us: int
    basis: str
    mean: Array
    cov: Array
    drive: Array


FILLED = "filled from backlog"  # a gap whose readings came later


@dataclass(frozen=True, slots=True)
class Gap:
    """No usable reading between these times, or a channel silent."""

    from_us: int
    to_us: int
    what: str


@dataclass(frozen=True)
class Outcome:
    """What one tick produced; the adapters store, send and show it."""

    at_us: int
    peak: PeakRow | None = None
    zone_powers: tuple[ZonePowerRow, ...] = ()
    limits: tuple[LimitRow, ...] = ()
    causes: tuple[CauseRow, ...] = ()
    alarm_events: tuple[AlarmEvent, ...] = ()
    shot: FieldShot | None = None
    gaps: tuple[Gap, ...] = ()
    notes: tuple[str, ...] = ()
    question: str = ""  # the one open question, empty when there is none
    applied: tuple[int, ...] = field(default=())  # seq of the actions used in this tick
