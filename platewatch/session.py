"""One plate's readings through the estimator: ticks and state together, no I/O.

The daemon and the replay both drive this; it is owned by one thread.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Mapping
from dataclasses import replace

from platewatch.monitor.annunciate import apply_actions, apply_conditions
from platewatch.monitor.conditions import BLIND_AFTER_S, picture_blind
from platewatch.monitor.pipeline import Monitor, State, first, resume, step
from platewatch.monitor.record_room import (
    ALARM,
    RECORD_EVENT,
    Keeping,
    RecordState,
    record_event,
    record_state,
    store_failing,
)
from platewatch.monitor.ticks import Ticker
from platewatch.types import (
    FILLED,
    Action,
    AlarmState,
    BatchEvent,
    FieldShot,
    Flag,
    Gap,
    Outcome,
    Reading,
    Tick,
)

__all__ = ["Keeping", "RecordState", "Session", "record_event"]


class Session:
    """From the readings of one run to its outcomes.

    closed_us: the last tick of the run before; what is stamped up to there is late
    shot, alarms: where that run had come to
    """

    def __init__(
        self,
        monitor: Monitor,
        *,
        closed_us: int | None = None,
        shot: FieldShot | None = None,
        alarms: Mapping[tuple[str, str], AlarmState] | None = None,
    ) -> None:
        options = monitor.estimator
        self._monitor = monitor
        if monitor.causes is not None:
            monitor.causes.prepare()
        self._ticker = Ticker(options.tick_us, options.late_us, closed_us=closed_us)
        fresh = shot is None and not alarms
        self._state: State = first(monitor) if fresh else resume(monitor, shot, alarms or {})
        self._due: deque[Tick] = deque()  # closed, and not gone through yet
        self._record = RecordState()
        self._failing_since_us: int | None = None
        self._gap: Gap | None = None  # the silence that the ticks are in, or that is being filled

    @property
    def monitor(self) -> Monitor:
        return self._monitor

    @property
    def state(self) -> State:
        """Where the estimator stands; replaced, never changed, at every tick."""
        return self._state

    @property
    def late(self) -> int:
        return self._ticker.late

    @property
    def duplicates(self) -> int:
        return self._ticker.duplicates

    @property
    def blind(self) -> bool:
        """Has the estimator found that no thermocouple speaks?"""
        return self._state.blind

    @property
    def closed_us(self) -> int | None:
        return self._ticker.closed_us

    @property
    def begun(self) -> bool:
        """Has the first tick of this run closed?"""
        return self._ticker.started

    def take(self, reading: Reading) -> Reading:
        """Take one reading; the answer is what to store, flagged if it is not used."""
        return self._ticker.add(reading)

    def take_event(self, event: BatchEvent) -> BatchEvent:
        return self._ticker.add_event(event)

    def act(self, actions: Iterable[Action], at_us: int | None = None) -> None:
        """Apply what people asked for in the next tick, or in the tick at `at_us`."""
        self._ticker.attach_actions(actions, at_us)

    @property
    def is_behind(self) -> bool:
        """Are there closed ticks that `close` has left for the next time?"""
        return bool(self._due)

    def close(self, now_us: int | None = None, most: int | None = None) -> list[Outcome]:
        """Run the ticks that may close now, at most so many; see `Ticker.close`."""
        self._due.extend(self._ticker.close(now_us))
        return self._run(most)

    def finish(self, until_us: int | None = None) -> list[Outcome]:
        """Run what is left at the end; see `Ticker.finish`."""
        self._due.extend(self._ticker.finish(until_us))
        return self._run()

    def finish_live(self) -> list[Outcome]:
        """Run what is left at an orderly stop; see `Ticker.finish_live`."""
        self._due.extend(self._ticker.finish_live())
        return self._run()

    def _run(self, most: int | None = None) -> list[Outcome]:
        count = len(self._due) if most is None else min(most, len(self._due))
        return [self._step(self._due.popleft()) for _ in range(count)]

    def _step(self, tick: Tick) -> Outcome:
        return self._watch_gap(tick, self._watch_record(tick, self._estimate(tick)))

    def _estimate(self, tick: Tick) -> Outcome:
        """One step of the estimator; whatever goes wrong in it, the record goes on.

        An estimate that cannot be continued is begun anew from this tick, and where that
        fails too, the tick has none: told once, and blind after as long as without readings.
        A replay of the same ticks fails alike.
        """
        try:
            self._state, outcome = step(self._monitor, self._state, tick)
            self._failing_since_us = None
            return outcome
        except Exception as error:
            why = f"the estimate could not be continued and was begun anew: {error!r}"
        kept = self._state.alarms
        try:
            afresh = replace(first(self._monitor), alarms=kept)
            self._state, outcome = step(self._monitor, afresh, tick)
            self._failing_since_us = None
            return replace(outcome, notes=(*outcome.notes, why))
        except Exception as error:
            return self._without_estimate(tick, f"there is no estimate: {error!r}")

    def _without_estimate(self, tick: Tick, why: str) -> Outcome:
        is_new = self._failing_since_us is None
        if self._failing_since_us is None:
            self._failing_since_us = tick.at_us
        alarms, events = apply_actions(self._state.alarms, tick)
        failing_us = tick.at_us - self._failing_since_us
        blind = picture_blind(self._monitor.words, failing_us, round(BLIND_AFTER_S * 1e6), True)
        blind = replace(blind, message=f"Blind: {why}. Look at the plant's own instruments.")
        alarms, raised = apply_conditions(alarms, [blind], tick)
        self._state = replace(first(self._monitor), alarms=alarms)
        return Outcome(
            tick.at_us,
            alarm_events=events + raised,
            notes=(why,) if is_new else (),
            applied=tuple(action.seq for action in tick.actions),
        )

    def _watch_record(self, tick: Tick, outcome: Outcome) -> Outcome:
        """Raise and clear the alarm about the record itself."""
        for event in tick.events:
            if event.event == RECORD_EVENT:
                self._record = record_state(event)
        standing = any(alarm == ALARM for alarm, _ in self._state.alarms)
        if self._record.is_well and not standing:
            return outcome
        found = store_failing(self._record)
        alarms, raised = apply_conditions(dict(self._state.alarms), found, tick)
        self._state = replace(self._state, alarms=alarms)
        return replace(outcome, alarm_events=outcome.alarm_events + raised)

    def _watch_gap(self, tick: Tick, outcome: Outcome) -> Outcome:
        """A silence is a gap while it lasts; a backlog fills it up to where that ends."""
        if self._state.blind:
            begun_us = self._state.silent_since_us
            self._gap = Gap(begun_us, tick.at_us, "no usable reading")
            return replace(outcome, gaps=(self._gap,))
        if outcome.gaps:
            self._gap = outcome.gaps[-1]
        if self._gap is None or not tick.readings:
            return outcome
        if not tick.backlog and not _has_backlog(tick):
            self._gap = None
            return outcome
        self._gap = Gap(self._gap.from_us, tick.at_us, FILLED)
        return replace(outcome, gaps=(self._gap,))


def _has_backlog(tick: Tick) -> bool:
    return any(reading.flags & Flag.BACKLOG for reading in tick.readings)
