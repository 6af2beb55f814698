"""The one source of time, passed in wherever time is needed."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import Protocol


class Clock(Protocol):
    """What a daemon asks of time."""

    def utc_us(self) -> int:
        """Integer microseconds UTC, for records; may step when the machine is set."""
        ...

    def monotonic(self) -> float:
        """Seconds since some fixed moment, for intervals; never steps."""
        ...


@dataclass(frozen=True)
class SystemClock:
    """The machine's own clocks."""

    def utc_us(self) -> int:
        return time.time_ns() // 1000

    def monotonic(self) -> float:
        return time.monotonic()


@dataclass(frozen=True)
class ScaledClock:
    """A clock that runs `speed` times as fast as the machine, for the demonstration.

    origin_us: what it showed, integer microseconds UTC, when the machine's
    monotonic clock stood at `origin_monotonic` (s).  Two processes of one machine
    that are given the same three numbers read the same time.
    """

    origin_us: int
    origin_monotonic: float
    speed: float

    def utc_us(self) -> int:
        return self.origin_us + round(self._elapsed_s() * 1e6)

    def monotonic(self) -> float:
        return self.origin_monotonic + self._elapsed_s()

    def _elapsed_s(self) -> float:
        return (time.monotonic() - self.origin_monotonic) * self.speed
