"""Alarm limits: the values at which we alarm, as the plant rationalised them."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class LimitKind(StrEnum):
    PEAK = "peak"
    SENSOR = "sensor"
    LOW = "low"
    SPREAD = "spread"
    READY = "ready"


class Priority(StrEnum):
    HIGH = "high"
    MEDIUM = "medium"
    LOW = "low"


@dataclass(frozen=True)
class AlarmLimit:
    """value and deadband: degC and K (minutes for `ready`).

    zone: judged in this zone only;  sensor: for kind `sensor`, else all of them
    steps: recipe steps (by their `do` word) in which it holds; empty means always
    """

    name: str
    kind: LimitKind
    value: float
    priority: Priority
    deadband: float
    zone: str = ""
    sensor: str = ""
    steps: tuple[str, ...] = ()
    record_only: bool = False
    enabled: bool = True
    cause: str = ""
    consequence: str = ""
    response: str = ""
    time_to_respond_min: float | None = None
    on_delay_s: float | None = None
    off_delay_s: float | None = None
