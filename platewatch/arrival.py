"""How old readings are when they arrive, and whether this computer's clock can be trusted."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

from platewatch.types import Flag, Reading

BACKLOG_AFTER_US = 15_000_000  # older than this, a value no longer says what is now
STEADY_US = 5_000_000  # ages within this of each other are one clock's offset
STEADY_FOR_S = 30.0
STEP_US = 1_000_000  # a clock that moves by more against the monotonic one was set


@dataclass(frozen=True, slots=True)
class Ages:
    """Tells history from a source clock that is merely off.

    A backlog comes faster than real time, so its ages fall; a clock that is off keeps
    its offset.  offset_us: what counts as age zero;  candidate_us, since_s: an age that
    has been steady since that monotonic time, None before any
    """

    offset_us: int = 0
    candidate_us: int | None = None
    since_s: float = 0.0

    def seen(self, youngest_us: int, now_s: float) -> Ages:
        """After the youngest age among the readings of one moment."""
        candidate = self.candidate_us
        if candidate is None or abs(youngest_us - candidate) > STEADY_US:
            return replace(self, candidate_us=youngest_us, since_s=now_s)
        if now_s - self.since_s < STEADY_FOR_S:
            return self
        off = abs(candidate) > STEADY_US
        return replace(self, offset_us=candidate if off else 0)

    def judge(self, readings: Iterable[Reading]) -> list[Reading]:
        """The readings, those that are history flagged as backlog."""
        limit = BACKLOG_AFTER_US + self.offset_us
        return [
            replace(r, flags=r.flags | Flag.BACKLOG) if r.seen_us - r.at_us > limit else r
            for r in readings
        ]


@dataclass(frozen=True, slots=True)
class ClockWatch:
    """Notices that this computer's clock was set: it moved against the monotonic one."""

    ahead_us: int | None = None  # UTC minus monotonic, when last looked at

    def look(self, utc_us: int, monotonic_s: float) -> tuple[ClockWatch, int]:
        """The watch from now on, and the step in us, 0 for none."""
        ahead_us = utc_us - round(monotonic_s * 1e6)
        if self.ahead_us is None:
            return ClockWatch(ahead_us), 0
        step_us = ahead_us - self.ahead_us
        # A slow drift is no step: it is measured anew at every look.
        return ClockWatch(ahead_us), step_us if abs(step_us) > STEP_US else 0
