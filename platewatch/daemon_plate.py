"""One run of one plate: bus to estimator to record to bus."""

from __future__ import annotations

import logging
import queue
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field

from platewatch import __version__, compose
from platewatch import daemon_words as words
from platewatch.arrival import Ages, ClockWatch
from platewatch.clock import Clock
from platewatch.errors import StorageError
from platewatch.types import BatchEvent, LimitRow, Outcome, PeakRow, Reading

COMMIT_EVERY_S = 1.0
COMMIT_AT = 16  # messages; a broker sends no more than 20 ahead of their acknowledgement
POLL_EVERY_S = 1.0
MOST_AT_ONCE = 1000  # messages in one turn, so that the other plates are not kept waiting
MOST_UNSTORED = 50_000  # readings kept in memory while the record cannot be written
CALM_LINE_EVERY_S = 600.0
REMIND_EVERY_S = 600.0
BACKLOG_WITHIN_S = 60.0  # of the bus coming back, a gateway sends what it kept


@dataclass
class Unstored:
    """What waits for the next commit."""

    readings: list[Reading] = field(default_factory=list)
    events: list[BatchEvent] = field(default_factory=list)
    outcomes: list[Outcome] = field(default_factory=list)
    tokens: list[compose.Token] = field(default_factory=list)

    def __bool__(self) -> bool:
        return bool(self.readings or self.events or self.outcomes or self.tokens)


class PlateRun:
    """One run of one plate.  Everything but the bus callbacks happens in the caller's thread.

    plate: name;  store: opened and held alone by the caller
    calm_s: how often one line says how things stand
    """

    def __init__(
        self,
        description: compose.Description,
        monitor: compose.Monitor,
        store: compose.Store,
        clock: Clock,
        log: logging.Logger,
        calm_s: float = CALM_LINE_EVERY_S,
    ) -> None:
        self.plate = description.plate.name
        self._calm_every_s = calm_s
        self.description = description
        self.latest: PeakRow | None = None
        self.recent: list[Outcome] = []  # of the last round
        self._store, self._clock = store, clock
        self._log = logging.LoggerAdapter(log, {"plate": self.plate})
        self._routes = compose.build_routes(description)
        self._sink: queue.Queue[compose.Arrival] = queue.Queue(compose.LONGEST_QUEUE)
        last = [run.last_tick_us for run in store.runs(self.plate) if run.last_tick_us]
        closed_us = max(last, default=None)
        self.session = compose.resume_session(monitor, store, self.plate, closed_us)
        self.run_no = store.start_run(
            self.plate,
            clock.utc_us(),
            __version__,
            description.sha256,
            description.path.read_bytes(),
        )
        self._bus = compose.build_bus(description, self._routes, self._sink, clock, self.run_no)
        self._ages, self._clock_watch, self._repeats = Ages(), ClockWatch(), words.Repeats()
        self._heard: Counter[str] = Counter()
        self._waiting, self._passing = Unstored(), dict[str, LimitRow]()
        self._committed_s = self._polled_s = self._calm_s = self._reminded_s = clock.monotonic()
        self._last_down_s = self._reminded_s
        self._asked = False  # actions wait for a tick
        self._action_seq = self._take_up(closed_us)

    def _take_up(self, closed_us: int | None) -> int:
        """What the record holds that no tick has used; the last action's number."""
        if closed_us is not None:
            for reading in self._store.read_readings(self.plate, closed_us + 1):
                self.session.take(reading)
            for event in self._store.events(self.plate, closed_us + 1):
                self.session.take_event(event)
        self.session.act(self._store.unapplied_actions(self.plate))
        return max((done.action.seq for done in self._store.actions(self.plate)), default=0)

    def start(self) -> None:
        bus = self.description.bus
        resumed = self.session.closed_us is not None
        how = "from where the record ends" if resumed else "with an empty record"
        self._log.info("run %d starts %s; broker %s:%d", self.run_no, how, bus.host, bus.port)
        self._bus.start()

    def turn(self) -> bool:
        """One round: take, estimate, store, answer.  True while there is more to do."""
        now_s = self._clock.monotonic()
        self._watch_bus(now_s)
        self._watch_clock(now_s)
        took = self._take_messages()
        self._poll_actions(now_s)
        self.recent = self.session.close(self._ticker_clock(now_s))
        self._estimate(self.recent)
        full = self._sink.empty() and len(self._waiting.tokens) >= COMMIT_AT
        if full or now_s - self._committed_s >= COMMIT_EVERY_S:
            self._commit(now_s)
        self._calm_line(now_s)
        return took > 0

    def stop(self) -> None:
        """Stop reading, finish the open ticks, commit, acknowledge, say goodbye."""
        while self._take_messages():
            pass
        self._estimate(self.session.finish())
        self._commit(self._clock.monotonic())
        if self._waiting:
            self._log.error(
                "stopped with %d readings that could not be stored; the broker keeps them",
                len(self._waiting.readings),
            )
        self._bus.stop(compose.alive_message("stopped", self._clock.utc_us(), self.run_no))
        self._log.info("run %d stopped", self.run_no)

    def _ticker_clock(self, now_s: float) -> int | None:
        """None while the bus is down or just back and that was said: a backlog then finds
        its ticks open.  What a person asked for does not wait: it needs a tick."""
        down = now_s - self._last_down_s < BACKLOG_WITHIN_S
        waits = down and self.session.blind and not self._asked
        return None if waits else round(now_s * 1e6)

    def _take_messages(self) -> int:
        if len(self._waiting.readings) > MOST_UNSTORED:
            return 0  # the broker keeps what we do not take
        arrived: list[Reading] = []
        count = 0
        while count < MOST_AT_ONCE:
            try:
                message = self._sink.get_nowait()
            except queue.Empty:
                break
            count += 1
            self._waiting.tokens.append(message.token)
            decoded = self._routes.decode(
                message.topic,
                message.payload,
                message.seen_us,
                retain=message.retain,
                dup=message.dup,
            )
            arrived += decoded.readings
            for refusal in decoded.refusals:
                self._refused(refusal)
            self._waiting.events += [self.session.take_event(e) for e in decoded.events]
        if arrived:
            self._take_readings(arrived)
        return count

    def _take_readings(self, arrived: Sequence[Reading]) -> None:
        live = [r.seen_us - r.at_us for r in arrived if r.usable]
        if live:
            known_us = self._ages.offset_us
            self._ages = self._ages.seen(min(live), self._clock.monotonic())
            if self._ages.offset_us != known_us:
                self._note_clock(-self._ages.offset_us, "the sources' clock is off")
        late, twice = self.session.late, self.session.duplicates
        self._waiting.readings += [self.session.take(r) for r in self._ages.judge(arrived)]
        self._heard.update(r.channel for r in arrived if r.usable)
        self._set_aside("came too late for their tick", self.session.late - late)
        self._set_aside("were there already", self.session.duplicates - twice)

    def _set_aside(self, why: str, count: int) -> None:
        told = self._repeats.due(why, self._clock.monotonic(), count) if count else 0
        if told:
            self._log.info("%d readings %s; stored or known, not used", told, why)

    def _refused(self, refusal: compose.Refusal) -> None:
        if refusal.reading is not None:
            self._waiting.readings.append(refusal.reading)
        told = self._repeats.due(f"refused {refusal.reason}", self._clock.monotonic())
        if told:
            more = f" ({told} like it since the last such line)" if told > 1 else ""
            self._log.warning("refused: %s%s", refusal, more)

    def _poll_actions(self, now_s: float) -> None:
        if now_s - self._polled_s < POLL_EVERY_S:
            return
        self._polled_s = now_s
        try:
            actions = self._store.new_actions(self.plate, self._action_seq)
        except StorageError as error:
            self._store_trouble(error)
            return
        if actions:
            self._action_seq, self._asked = actions[-1].seq, True
            self.session.act(actions)

    def _estimate(self, outcomes: Sequence[Outcome]) -> None:
        for outcome in outcomes:
            self._asked = False
            if self.latest is None and outcome.peak is not None:
                self._first_readings()
            self.latest = outcome.peak or self.latest
            self._passing |= {row.alarm_limit: row for row in outcome.limits}
            for event in outcome.alarm_events:
                self._log.log(*words.alarm_line(event))
            for gap in outcome.gaps:
                self._log.warning("%s", words.gap_line(gap))
        self._waiting.outcomes += outcomes
        self._publish(outcomes)

    def _first_readings(self) -> None:
        plate = self.description.plate
        sensors = sum(1 for s in plate.sensors if self._heard[f"sensor/{s.name}"])
        duties = sum(1 for z in plate.zones if self._heard[f"zone/{z.name}/duty"])
        self._log.info(
            "first readings: %d of %d sensors, %d of %d duties",
            sensors,
            len(plate.sensors),
            duties,
            len(plate.zones),
        )

    def _commit(self, now_s: float) -> None:
        """Store all or nothing; only what is stored is acknowledged."""
        self._committed_s = now_s
        self._bus.alive(compose.alive_message("alive", self._clock.utc_us(), self.run_no))
        waiting = self._waiting
        if not waiting:
            return
        try:
            self._store.write(
                self.plate, waiting.outcomes, waiting.readings, self._routes.units, waiting.events
            )
        except StorageError as error:
            self._store_trouble(error)
            return
        self._waiting = Unstored()
        self._bus.acknowledge(waiting.tokens)

    def _store_trouble(self, error: StorageError) -> None:
        if self._repeats.due("store", self._clock.monotonic()):
            self._log.error("record not written, nothing acknowledged, trying again: %s", error)

    def _publish(self, outcomes: Sequence[Outcome]) -> None:
        """The newest peak and every alarm change; the bus sends nothing unless it may."""
        for event in (event for outcome in outcomes for event in outcome.alarm_events):
            topic = compose.alarm_topic(self.plate, event)
            self._bus.publish(topic, compose.alarm_message(event, self.run_no), retain=True, qos=1)
        if not outcomes or outcomes[-1].peak is None:
            return
        shown = self.session.monitor.shown_limit
        row = self._passing.get(shown.name) if shown else None
        body = compose.peak_message(outcomes[-1].peak, self.run_no, row.to_limit_s if row else None)
        self._bus.publish(compose.topic_of(self.plate, "peak"), body)

    def _watch_bus(self, now_s: float) -> None:
        self._bus.watch()
        while not self._bus.events.empty():
            event = self._bus.events.get()
            self._log.log(words.bus_level(event.what), "%s: %s", event.what, event.text)
        if self._bus.connected:
            self._reminded_s = now_s
            return
        self._last_down_s = now_s
        if now_s - self._reminded_s >= REMIND_EVERY_S:
            self._reminded_s = now_s
            self._log.warning("still no broker at %s:%d", self._bus.host, self._bus.port)

    def _watch_clock(self, now_s: float) -> None:
        self._clock_watch, step_us = self._clock_watch.look(self._clock.utc_us(), now_s)
        if step_us:
            self._note_clock(step_us, "this computer's clock was set")

    def _note_clock(self, offset_us: int, what: str) -> None:
        """One line and one row; intervals here never depend on this clock."""
        self._log.warning("%s by %+.0f s", what, offset_us / 1e6)
        try:
            self._store.note_clock(self.plate, self._clock.utc_us(), offset_us, what)
        except StorageError as error:
            self._store_trouble(error)

    def _calm_line(self, now_s: float) -> None:
        if now_s - self._calm_s < self._calm_every_s:
            return
        self._calm_s = now_s
        if self.latest is not None and not self.session.blind:
            self._log.info("%s", words.peak_line(self.latest))
