"""Readings in, ticks out: the estimator's time, made from stamps and flags only.

Tick n stands at n * tick_us (integer microseconds UTC, n * tick_us from the epoch)
and holds the readings stamped in (n - 1, n].

Why a replay makes the same ticks as the live run.  Which tick a reading belongs to
follows from its stamp alone.  Live, a tick may close early (the clock, in a silence)
or on time (a newer stamp); the only trace of that choice is that a reading which came
too late was flagged LATE.  The record keeps the flag and a flagged reading is never
used, so a replay puts exactly the same readings into exactly the same ticks, in the
order (at_us, channel).  Empty ticks follow from the readings too: after the last tick
with a usable reading they come one by one for GAP_US; what is then left up to the
tick before the next reading is one long tick.  The clock closes no tick beyond that
GAP_US, so a live run cannot make one that a replay would not.  What only the record
knows, how far the clock had come when a run ended, is given to `finish`.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

from platewatch.types import Action, BatchEvent, Flag, Reading, Tick

GAP_US = 600_000_000  # empty ticks are made one by one for this long, then as one
GRACE_US = 10_000_000  # after a broken bus is back, before the clock closes ticks again
SPEAKS_US = 60_000_000  # a channel that arrived within this has a say in how far time has come


class Ticker:
    """Holds the readings of the ticks that are still open; owned by one thread.

    tick_us: length of a tick;  late_us: how long a tick waits for stragglers
    closed_us: last tick of the run before this one; what is stamped up to there is late

    Two readings of one channel with the same stamp: the first counts, as in the record.
    `late` and `duplicates` count what was set aside.
    """

    def __init__(
        self,
        tick_us: int,
        late_us: int,
        *,
        closed_us: int | None = None,
        gap_us: int = GAP_US,
        grace_us: int = GRACE_US,
    ) -> None:
        if tick_us <= 0 or late_us < 0 or gap_us < 0:
            raise ValueError("tick_us must be positive, late_us and gap_us not negative")
        self.tick_us, self.late_us, self.gap_us = tick_us, late_us, gap_us
        self.late = 0
        self.duplicates = 0
        self.started = False
        self._grace_us = grace_us
        self._open: dict[int, dict[tuple[int, str], Reading]] = {}
        self._before: dict[str, Reading] = {}
        self._closed = closed_us
        self._last_data = 0
        self._newest: int | None = None
        self._furthest: int | None = None
        self._latest: dict[str, tuple[int, int]] = {}  # channel: newest stamp, its arrival
        self._quiet_since: int | None = None
        self._not_before: int | None = None
        self._actions: list[tuple[int | None, Action]] = []
        self._events: list[BatchEvent] = []

    @property
    def closed_us(self) -> int | None:
        """The last tick that closed; readings stamped up to it are late."""
        return self._closed

    @property
    def newest_us(self) -> int | None:
        """The stamp that most thermocouples have reached.

        One source whose clock is ahead must not close every tick before the others
        were heard: more than half of the sensors that spoke within SPEAKS_US of arrival
        have to be there (of all channels, while no sensor speaks).
        """
        return self._newest

    def add(self, reading: Reading) -> Reading:
        """Take one reading; the answer is what to store, flagged if it cannot be used.

        LATE: stamped at or before the last closed tick.  MAYBE_DUPLICATE: the same
        channel and stamp are already there.  Flags that it brings along are obeyed.
        """
        if self._closed is not None and reading.at_us <= self._closed:
            return self._too_late(reading)
        open_tick = self._open.setdefault(self._tick_of(reading.at_us), {})
        key = (reading.at_us, reading.channel)
        if key in open_tick:
            self.duplicates += 1
            return replace(reading, flags=reading.flags | Flag.MAYBE_DUPLICATE)
        open_tick[key] = reading
        if reading.usable:
            self._heard(reading)
        return reading

    def add_event(self, event: BatchEvent) -> BatchEvent:
        """Take one batch event; the answer is what to store.

        It goes into the tick of its stamp.  One that comes late can only act from now
        on, so it is stamped just after the last closed tick; a replay then finds it in
        the same tick.
        """
        if self._closed is not None and event.at_us <= self._closed:
            event = replace(event, at_us=self._closed + 1)
        self._events.append(event)
        return event

    def attach_actions(self, actions: Iterable[Action], at_us: int | None = None) -> None:
        """Apply actions in the next tick that closes, or (replay) in the tick at `at_us`."""
        self._actions.extend((at_us, action) for action in actions)

    def close(self, now_us: int | None = None) -> list[Tick]:
        """The ticks that may close now, in order.

        By stamps: `newest_us` is at or past tick + late_us.  By the clock, in a
        silence: `now_us` has run on by that much since `newest_us` moved, at
        most GAP_US beyond the last tick with a reading.  Only differences of `now_us`
        count, so a clock that disagrees with the sources does no harm; give a steady
        one (`Clock.monotonic`), for a step of it would count as silence.

        None: by stamps only, as in a replay.
        """
        by_stamp = None if self._newest is None else self._newest - self.late_us
        by_clock = self._clock_limit(now_us)
        return self._close_up_to(by_stamp, by_clock)

    def hold(self, now_us: int) -> None:
        """The bus is known to be down: the clock closes nothing until GRACE_US after.

        Called at every turn of the loop while it is down; a backlog then still finds
        its ticks open.
        """
        self._quiet_for(now_us)
        self._not_before = now_us + self._grace_us

    def finish(self, until_us: int | None = None) -> list[Tick]:
        """Close what is left: every tick with a reading, at the end of a log or a run.

        until_us: the last tick of the recorded run; empty ticks up to it are made as
        the clock made them, and later readings stay out.
        """
        if until_us is not None:
            return self._close_up_to(until_us, until_us)
        last = None if self._furthest is None else self._tick_of(self._furthest)
        return self._close_up_to(last, None)

    def finish_live(self) -> list[Tick]:
        """Close what most thermocouples have reached, at an orderly stop.

        What one source has stamped further ahead stays for the next run.
        """
        if self._newest is None:
            return []
        until_us = self._tick_of(self._newest)
        return self._close_up_to(until_us, until_us)

    def _heard(self, reading: Reading) -> None:
        """How far time has come, after one more usable reading."""
        at_us, seen_us = reading.at_us, reading.seen_us
        self._furthest = at_us if self._furthest is None else max(at_us, self._furthest)
        known = self._latest.get(reading.channel)
        self._latest[reading.channel] = (max(at_us, known[0]) if known else at_us, seen_us)
        if self.started and self._newest is not None and at_us <= self._newest:
            return
        reached = self._reached(seen_us)
        # Before the first tick the next sensor may show that the first one was ahead.
        if self._newest is None or reached > self._newest or not self.started:
            self._newest = reached
            self._quiet_since = None

    def _reached(self, seen_us: int) -> int:
        """The stamp that more than half of the sensors, else of all channels, have reached."""
        speaking = [
            (channel, at_us)
            for channel, (at_us, arrived_us) in self._latest.items()
            if abs(seen_us - arrived_us) <= SPEAKS_US
        ]
        stamps = [at_us for channel, at_us in speaking if channel.startswith("sensor/")]
        stamps = sorted(stamps or (at_us for _, at_us in speaking), reverse=True)
        return stamps[len(stamps) // 2]

    def _tick_of(self, at_us: int) -> int:
        return -(-at_us // self.tick_us) * self.tick_us

    def _floor(self, at_us: int) -> int:
        return at_us // self.tick_us * self.tick_us

    def _too_late(self, reading: Reading) -> Reading:
        self.late += 1
        return replace(reading, flags=reading.flags | Flag.LATE)

    def _clock_limit(self, now_us: int | None) -> int | None:
        """The source time up to which the clock closes ticks, None if not at all."""
        if now_us is None or self._newest is None:
            return None
        quiet_us = self._quiet_for(now_us)
        if self._not_before is not None and now_us < self._not_before:
            return None
        return self._newest + quiet_us - self.late_us

    def _quiet_for(self, now_us: int) -> int:
        """Since the first look at the clock after the newest reading."""
        if self._quiet_since is None:
            self._quiet_since = now_us
        return now_us - self._quiet_since

    def _close_up_to(self, by_stamp: int | None, by_clock: int | None) -> list[Tick]:
        limits = [limit for limit in (by_stamp, by_clock) if limit is not None]
        if not limits:
            return []
        limit = self._floor(max(limits))
        ticks: list[Tick] = []
        for at_us in sorted(at for at in self._open if at <= limit):
            held = self._open.pop(at_us)
            readings = [reading for reading in held.values() if reading.usable]
            if readings:
                self._close_with(at_us, readings, ticks)
        if self.started:
            self._close_empty(min(limit, self._last_of_gap()), ticks)
        elif self._closed is None or limit > self._closed:
            self._closed = limit
        return ticks

    def _close_with(self, at_us: int, readings: list[Reading], ticks: list[Tick]) -> None:
        """One tick that holds readings, after the empty ones before it."""
        if not self.started:
            if not any(reading.channel.startswith("sensor/") for reading in readings):
                self._keep_inputs(readings)
                return
            self.started = True
            readings += self._before.values()
            self._before = {}
            self._closed = at_us - self.tick_us
        else:
            self._close_empty(min(at_us - self.tick_us, self._last_of_gap()), ticks)
            if self._closed is not None and self._closed < at_us - self.tick_us:
                ticks.append(self._tick(at_us - self.tick_us, []))
        self._last_data = at_us
        ticks.append(self._tick(at_us, readings))

    def _keep_inputs(self, readings: list[Reading]) -> None:
        """Before the first sensor reading only the newest value of each input is kept."""
        for reading in readings:
            known = self._before.get(reading.channel)
            if known is None or reading.at_us > known.at_us:
                self._before[reading.channel] = reading

    def _last_of_gap(self) -> int:
        return self._floor(self._last_data + self.gap_us)

    def _close_empty(self, limit: int, ticks: list[Tick]) -> None:
        assert self._closed is not None
        while self._closed + self.tick_us <= limit:
            ticks.append(self._tick(self._closed + self.tick_us, []))

    def _tick(self, at_us: int, readings: list[Reading]) -> Tick:
        """The tick from the last closed one to `at_us`; closes it."""
        assert self._closed is not None
        readings.sort(key=lambda reading: (reading.at_us, reading.channel))
        tick = Tick(
            at_us=at_us,
            dt_us=at_us - self._closed,
            readings=tuple(readings),
            actions=self._actions_of(at_us),
            events=self._events_of(at_us),
            backlog=_is_backlog(readings),
        )
        self._closed = at_us
        return tick

    def _actions_of(self, at_us: int) -> tuple[Action, ...]:
        due = [action for when, action in self._actions if when is None or when <= at_us]
        if due:
            self._actions = [item for item in self._actions if item[0] and item[0] > at_us]
        return tuple(sorted(due, key=lambda action: action.seq))

    def _events_of(self, at_us: int) -> tuple[BatchEvent, ...]:
        due = [event for event in self._events if event.at_us <= at_us]
        if due:
            self._events = [event for event in self._events if event.at_us > at_us]
        return tuple(sorted(due, key=lambda event: (event.at_us, event.event, event.detail)))


def _is_backlog(readings: list[Reading]) -> bool:
    """History only: every sensor reading (or, with none, every reading) is backlog.

    One late gateway among live ones must not make a tick history.
    """
    judged = [r for r in readings if r.channel.startswith("sensor/")] or readings
    return bool(judged) and all(reading.flags & Flag.BACKLOG for reading in judged)
