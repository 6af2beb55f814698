"""How old readings are when they arrive, and whether this computer's clock can be trusted."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from statistics import median_low

from platewatch.clock import Clock
from platewatch.types import Flag, Reading

BACKLOG_AFTER_US = 15_000_000  # older than this, a value no longer says what is now
STEADY_US = 5_000_000  # ages within this of each other are one clock's offset
STEADY_FOR_S = 30.0
STEP_US = 1_000_000  # a clock that moves by more against the monotonic one was set
FOLLOW_US = 600_000_000  # a step forward by more is followed, a smaller one is ridden out
BACK_US = 2_000_000  # stamps that are behind by more, in step with time, were set back
BACK_IN_A_ROW = 3
SPEAKS_US = 60_000_000


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


class ArrivalClock:
    """The time base of one run: no step of this computer's clock comes into the record.

    It begins with UTC and goes on by the monotonic clock, so that values without a
    source time stay in order.  It is jumped forward where the computer's clock turns out
    to have been far behind.  after_us: the last tick on record; where UTC is behind it
    by no more than FOLLOW_US, the run goes on from there.
    """

    def __init__(self, clock: Clock, after_us: int | None = None) -> None:
        self._clock = clock
        self._watch, _ = ClockWatch().look(clock.utc_us(), clock.monotonic())
        now_us = clock.utc_us()
        behind_us = 0 if after_us is None else after_us - now_us
        self.ahead_us = behind_us if 0 < behind_us <= FOLLOW_US else 0  # of this computer
        self._base_us = now_us + self.ahead_us - round(clock.monotonic() * 1e6)

    def utc_us(self) -> int:
        return self._base_us + round(self._clock.monotonic() * 1e6)

    def monotonic(self) -> float:
        return self._clock.monotonic()

    def look(self) -> int:
        """The step (us) that the computer's clock made since the last look, 0 for none."""
        utc_us, now_s = self._clock.utc_us(), self._clock.monotonic()
        self._watch, step_us = self._watch.look(utc_us, now_s)
        behind_us = utc_us - self.utc_us()
        if step_us and behind_us > FOLLOW_US:
            self._base_us += behind_us
        return step_us


@dataclass(frozen=True, slots=True)
class Skew:
    """A clock of the sources that is off; offset_us: source minus this computer."""

    offset_us: int
    what: str


class SourceClocks:
    """What the stamps say about the clocks that made them, channel by channel.

    One source that is off must not make the others look old: what counts as age zero is
    the median over the channels that spoke within SPEAKS_US.
    """

    def __init__(self) -> None:
        self.common = Ages()
        self._ages: dict[str, Ages] = {}
        self._last: dict[str, tuple[int, int]] = {}  # channel: stamp and arrival
        self._newest: dict[str, int] = {}
        self._behind: dict[str, int] = {}
        self._told: dict[str, int] = {}

    def hear(self, readings: Sequence[Reading], now_s: float) -> list[Skew]:
        """Take in what arrived at one moment; what is newly known to be off."""
        live = [reading for reading in readings if reading.usable]
        if not live:
            return []
        back = {r.channel: behind for r in live if (behind := self._set_back(r))}
        for reading in live:
            self._last[reading.channel] = (reading.at_us, reading.seen_us)
            ages = self._ages.get(reading.channel, Ages())
            self._ages[reading.channel] = ages.seen(reading.seen_us - reading.at_us, now_s)
        known_us = self.common.offset_us
        typical_us = self._typical_us(live[-1].seen_us)
        self.common = self.common.seen(typical_us, now_s)
        found = []
        if back:
            found.append(Skew(-max(back.values()), f"source time of {_named(back)} went back"))
        if self.common.offset_us != known_us:
            found.append(Skew(-self.common.offset_us, "the sources' clock is off"))
            self._told = dict.fromkeys(self._ages, self.common.offset_us)
        return found + self._apart({r.channel for r in live}, typical_us)

    def judge(self, readings: Iterable[Reading]) -> list[Reading]:
        """The readings, those that are history flagged as backlog."""
        return self.common.judge(readings)

    def _typical_us(self, seen_us: int) -> int:
        ages = [
            arrived_us - at_us
            for at_us, arrived_us in self._last.values()
            if seen_us - arrived_us <= SPEAKS_US
        ]
        return median_low(ages)

    def _set_back(self, reading: Reading) -> int:
        """By how much a channel's stamps went back (us), told once; 0 if they did not.

        A backlog comes faster than its stamps; a clock that was set back keeps step.
        """
        channel = reading.channel
        newest = max(self._newest.get(channel, reading.at_us), reading.at_us)
        self._newest[channel] = newest
        last = self._last.get(channel)
        if last is None or newest - reading.at_us <= BACK_US:
            self._behind[channel] = 0
            return 0
        moved_us, passed_us = reading.at_us - last[0], reading.seen_us - last[1]
        in_step = moved_us > 0 and abs(moved_us - passed_us) < 0.5 * moved_us
        self._behind[channel] = self._behind.get(channel, 0) + 1 if in_step else 0
        if self._behind[channel] < BACK_IN_A_ROW:
            return 0
        self._newest[channel] = reading.at_us
        return newest - reading.at_us

    def _apart(self, channels: set[str], typical_us: int) -> list[Skew]:
        """Single channels whose clock differs from the others', told when it changes."""
        found: dict[int, list[str]] = {}
        for channel in channels:
            offset_us = self._ages[channel].offset_us
            if abs(offset_us - self._told.get(channel, 0)) > STEADY_US:
                self._told[channel] = offset_us
                found.setdefault(offset_us, []).append(channel)
        return [
            Skew(-offset_us, f"the clock of {_named(names)} is off")
            for offset_us, names in found.items()
            if abs(offset_us - typical_us) > STEADY_US
        ]


def _named(channels: Iterable[str]) -> str:
    names = sorted(channels)
    more = f" and {len(names) - 3} more" if len(names) > 3 else ""
    return ", ".join(names[:3]) + more
