"""How old readings are when they arrive: live, or the backlog of an outage."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

from platewatch.types import Flag, Reading

BACKLOG_AFTER_US = 15_000_000  # older than this, a value no longer says what is now
STEADY_US = 5_000_000  # ages within this of each other are one clock's offset
STEADY_FOR_S = 30.0


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
