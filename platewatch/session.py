"""One plate's readings through the estimator: ticks and state together, no I/O.

The daemon and the replay both drive this; it is owned by one thread.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from platewatch.monitor.pipeline import Monitor, State, first, resume, step
from platewatch.monitor.ticks import Ticker
from platewatch.types import Action, AlarmState, BatchEvent, FieldShot, Outcome, Reading, Tick


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
        self._ticker = Ticker(options.tick_us, options.late_us, closed_us=closed_us)
        fresh = shot is None and not alarms
        self._state: State = first(monitor) if fresh else resume(monitor, shot, alarms or {})

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

    def take(self, reading: Reading) -> Reading:
        """Take one reading; the answer is what to store, flagged if it is not used."""
        return self._ticker.add(reading)

    def take_event(self, event: BatchEvent) -> BatchEvent:
        return self._ticker.add_event(event)

    def act(self, actions: Iterable[Action], at_us: int | None = None) -> None:
        """Apply what people asked for in the next tick, or in the tick at `at_us`."""
        self._ticker.attach_actions(actions, at_us)

    def close(self, now_us: int | None = None) -> list[Outcome]:
        """Run every tick that may close now; see `Ticker.close`."""
        return self._run(self._ticker.close(now_us))

    def finish(self, until_us: int | None = None) -> list[Outcome]:
        """Run what is left at the end; see `Ticker.finish`."""
        return self._run(self._ticker.finish(until_us))

    def _run(self, ticks: Iterable[Tick]) -> list[Outcome]:
        outcomes = []
        for tick in ticks:
            self._state, outcome = step(self._monitor, self._state, tick)
            outcomes.append(outcome)
        return outcomes
