"""One run of one plate: bus to estimator to record to bus."""

from __future__ import annotations

import logging
import queue
import time
from collections import Counter, deque
from collections.abc import Sequence
from concurrent.futures import Future

from platewatch import __version__, compose
from platewatch import daemon_words as words
from platewatch.arrival import ArrivalClock, SourceClocks
from platewatch.clock import Clock
from platewatch.daemon_record import PlateRecord
from platewatch.daemon_writer import Writer
from platewatch.errors import StorageError
from platewatch.session import RecordState, record_event
from platewatch.types import (
    Action,
    AlarmState,
    CauseRow,
    Gap,
    LimitRow,
    Outcome,
    PeakRow,
    Reading,
    Refused,
)

COMMIT_EVERY_S = 1.0
COMMIT_AT = 16  # messages; a broker sends no more than 20 ahead of their acknowledgement
POLL_EVERY_S = 1.0
MOST_AT_ONCE = 500  # messages in one turn, and
MOST_TICKS_AT_ONCE = 20  # ticks, so that the other plates are not kept waiting
ANNOUNCE_AFTER_S = 1.0  # an alarm is stored first, but never held up by the record
BEGIN_AFTER_S = 10.0  # from the first reading, if most sensors were not heard before
SOON_S = 0.02  # after an acknowledgement the broker sends what it held back
STALLED_AFTER_S = 8.0  # without a message, while what came is not acknowledged
CALM_LINE_EVERY_S = 600.0
REMIND_EVERY_S = 600.0
BACKLOG_WITHIN_S = 60.0  # of the bus coming back, a gateway sends what it kept


class PlateRun:
    """One run of one plate.  All but the bus callbacks and the writing is in the caller's thread.

    plate: name;  writer: of the record, which the caller has opened and holds alone
    calm_s: how often one line says how things stand
    """

    def __init__(
        self,
        description: compose.Description,
        monitor: compose.Monitor,
        writer: Writer,
        clock: Clock,
        log: logging.Logger,
        calm_s: float = CALM_LINE_EVERY_S,
    ) -> None:
        self.plate = description.plate.name
        self._calm_every_s = calm_s
        self.description = description
        self.latest: PeakRow | None = None
        self.recent: list[Outcome] = []  # of the last round
        store = writer.store
        self._store, self._clock = store, clock
        self._log = logging.LoggerAdapter(log, {"plate": self.plate})
        self._routes = compose.build_routes(description)
        self.record = PlateRecord(self.plate, writer, self._routes.units, self._log)
        self._sink: queue.Queue[compose.Arrival] = queue.Queue(compose.LONGEST_QUEUE)
        last = [run.last_tick_us for run in store.runs(self.plate) if run.last_tick_us]
        closed_us = max(last, default=None)
        self.session = compose.resume_session(monitor, store, self.plate, closed_us)
        self._arrival = ArrivalClock(clock, closed_us)
        self.run_no = store.start_run(
            self.plate,
            clock.utc_us(),
            __version__,
            description.sha256,
            description.path.read_bytes(),
        )
        self._bus = compose.build_bus(
            description,
            self._routes,
            self._sink,
            self._arrival,
            self.run_no,
            expects_session=closed_us is not None,
        )
        self._sources, self._repeats = SourceClocks(), words.Repeats()
        self._heard: Counter[str] = Counter()
        self._passing: dict[str, LimitRow] = {}
        self._causes: tuple[CauseRow, ...] = ()
        self._question = ""
        self._standing = {(e.alarm, e.subject): e for e in store.alarm_states(self.plate)}
        self._unannounced: deque[tuple[float, Outcome]] = deque()
        self._kept = RecordState()
        self._gap: Gap | None = None
        self._polling: Future[list[Action]] | None = None
        now_s = clock.monotonic()
        self._committed_s = self._polled_s = self._calm_s = self._reminded_s = now_s
        self._last_down_s = self._message_s = now_s
        self._first_s: float | None = None
        self._acknowledged_s = float("-inf")  # of the machine's clock
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
        if self._arrival.ahead_us:
            self._note_clock(self._arrival.ahead_us, "the record is ahead of this computer's clock")
        self._bus.start()

    def network_s(self) -> float:
        """Seconds since the network thread came round; infinite if it is dead."""
        return self._bus.turned_s()

    @property
    def expects(self) -> bool:
        """Is something due within milliseconds: a commit, or the messages that follow one?"""
        return self.record.is_writing or time.monotonic() - self._acknowledged_s < SOON_S

    def turn(self) -> bool:
        """One round: take, estimate, store, answer.  True while there is more to do."""
        now_s = self._clock.monotonic()
        self._watch_bus(now_s)
        self._watch_clock()
        self._watch_record(now_s)
        took = self._take_messages(now_s)
        self._poll_actions(now_s)
        ripe = self._may_begin(now_s)
        most = MOST_TICKS_AT_ONCE
        self.recent = self.session.close(self._ticker_clock(now_s), most) if ripe else []
        self._estimate(self.recent, now_s)
        self._settle(now_s)
        self._calm_line(now_s)
        return took > 0 or self.session.is_behind

    def stop(self) -> None:
        """Stop reading, finish the open ticks, commit, acknowledge, say goodbye."""
        now_s = self._clock.monotonic()
        for _ in range(self._sink.qsize() // MOST_AT_ONCE + 1):
            self._take_messages(now_s)
        self._estimate(self.session.finish_live(), now_s)
        settled = self.record.finish(now_s)
        self._bus.acknowledge(settled.tokens)
        while self._unannounced:
            self._announce(self._unannounced.popleft()[1])
        if self.record.waiting.readings:
            self._log.error(
                "stopped with %d readings that could not be stored; the broker keeps those "
                "that were not acknowledged",
                len(self.record.waiting.readings),
            )
        self._bus.stop(compose.alive_message("stopped", self._clock.utc_us(), self.run_no))
        self._log.info("run %d stopped", self.run_no)

    def abandon(self) -> None:
        """After a fault: leave the bus without a word; what was not stored comes again."""
        self._bus.abandon()

    def _may_begin(self, now_s: float) -> bool:
        """Most sensors were heard, or long enough waited for: one may be ahead of the others."""
        if self.session.begun or self._first_s is None:
            return True
        sensors = self.description.plate.sensors
        heard = sum(1 for sensor in sensors if self._heard[f"sensor/{sensor.name}"])
        return 2 * heard > len(sensors) or now_s - self._first_s >= BEGIN_AFTER_S

    def _ticker_clock(self, now_s: float) -> int | None:
        """None while the bus is down or just back and that was said: a backlog then finds
        its ticks open.  None, too, while there is something left to take in.  What a person
        asked for does not wait: it needs a tick."""
        if not self._sink.empty() or self.session.is_behind:
            return None
        down = now_s - self._last_down_s < BACKLOG_WITHIN_S
        waits = down and self.session.blind and not self._asked
        return None if waits else round(now_s * 1e6)

    def _take_messages(self, now_s: float) -> int:
        waiting = self.record.waiting
        arrived: list[Reading] = []
        count = 0
        while count < MOST_AT_ONCE:
            try:
                message = self._sink.get_nowait()
            except queue.Empty:
                break
            count += 1
            waiting.tokens.append(message.token)
            decoded = self._routes.decode(
                message.topic,
                message.payload,
                message.seen_us,
                retain=message.retain,
                dup=message.dup,
            )
            arrived += decoded.readings
            for refusal in decoded.refusals:
                self._refused(refusal, message.seen_us)
            waiting.events += [self.session.take_event(e) for e in decoded.events]
        if count:
            self._message_s = now_s
        if arrived:
            self._take_readings(arrived, now_s)
        return count

    def _take_readings(self, arrived: Sequence[Reading], now_s: float) -> None:
        if self._first_s is None:
            self._first_s = now_s
        for skew in self._sources.hear(arrived, now_s):
            self._note_clock(skew.offset_us, skew.what)
        late, twice = self.session.late, self.session.duplicates
        taken = [self.session.take(r) for r in self._sources.judge(arrived)]
        self.record.waiting.readings += taken
        self._heard.update(r.channel for r in arrived if r.usable)
        self._set_aside("came too late for their tick", self.session.late - late)
        self._set_aside("were there already", self.session.duplicates - twice)
        if self.session.duplicates > twice:
            count, seen_us = self.session.duplicates - twice, arrived[-1].seen_us
            told = "same channel and time as one that was there already"
            refused = Refused("", "", "duplicate", count, seen_us, seen_us, told, "")
            self.record.waiting.count(refused)

    def _set_aside(self, why: str, count: int) -> None:
        told = self._repeats.due(why, self._clock.monotonic(), count) if count else 0
        if told:
            self._log.info("%d readings %s; stored or known, not used", told, why)

    def _refused(self, refusal: compose.Refusal, seen_us: int) -> None:
        if refusal.reading is not None:
            self.record.waiting.readings.append(refusal.reading)
        self.record.waiting.count_refusal(refusal, seen_us)
        told = self._repeats.due(f"refused {refusal.reason}", self._clock.monotonic())
        if told:
            more = f" ({told} like it since the last such line)" if told > 1 else ""
            self._log.warning("refused: %s%s", refusal, more)

    def _poll_actions(self, now_s: float) -> None:
        """What people asked for; read in the writing thread, so that nothing here waits."""
        if self._polling is not None and self._polling.done():
            done, self._polling = self._polling, None
            try:
                actions = done.result()
            except StorageError as error:
                if self._repeats.due("actions", now_s):
                    self._log.warning("what people asked for cannot be read now: %s", error)
                return
            if actions:
                self._action_seq, self._asked = actions[-1].seq, True
                self.session.act(actions)
        if self._polling is None and now_s - self._polled_s >= POLL_EVERY_S:
            self._polled_s = now_s
            self._polling = self.record.writer.submit(
                self._store.new_actions, self.plate, self._action_seq
            )

    def _estimate(self, outcomes: Sequence[Outcome], now_s: float) -> None:
        for outcome in outcomes:
            self._asked = False
            if self.latest is None and outcome.peak is not None:
                self._log.info(words.first_line(self._heard, self._routes.units))
            self.latest = outcome.peak or self.latest
            self._passing |= {row.alarm_limit: row for row in outcome.limits}
            self._tell_gap(outcome)
            for text in outcome.notes:
                self._log.error("a fault of platewatch: %s; readings are recorded", text)
            self._causes = outcome.causes or self._causes
            if outcome.question not in ("", self._question):
                self._question = outcome.question
                self._log.info("question: %s (platewatch answer yes or no)", self._question)
            if outcome.alarm_events:
                self._unannounced.append((now_s, outcome))
        self.record.waiting.outcomes += outcomes
        self._publish_peak(outcomes)

    def _tell_gap(self, outcome: Outcome) -> None:
        """One line when a silence, or the backlog that filled it, is over."""
        if outcome.gaps:
            self._gap = outcome.gaps[-1]
        elif self._gap is not None:
            self._log.warning("%s", words.gap_line(self._gap))
            self._gap = None

    def _settle(self, now_s: float) -> None:
        """Store all or nothing; only what is stored is acknowledged, and then announced."""
        waiting = self.record.waiting
        alarm = any(outcome.alarm_events for outcome in waiting.outcomes)
        full = self._sink.empty() and len(waiting.tokens) >= COMMIT_AT
        due = alarm or full or now_s - self._committed_s >= COMMIT_EVERY_S
        settled = self.record.turn(now_s, due=due)
        if due:
            self._committed_s = now_s
            self._bus.alive(compose.alive_message("alive", self._clock.utc_us(), self.run_no))
        if self._bus.acknowledge(settled.tokens):
            self._acknowledged_s = time.monotonic()
        stored = {id(outcome) for outcome in settled.outcomes}
        while self._unannounced:
            since_s, outcome = self._unannounced[0]
            if id(outcome) not in stored and now_s - since_s < ANNOUNCE_AFTER_S:
                break
            self._announce(outcome)
            self._unannounced.popleft()

    def _announce(self, outcome: Outcome) -> None:
        for event in outcome.alarm_events:
            self._standing[event.alarm, event.subject] = event
            self._log.log(*words.alarm_line(event))
            topic = compose.alarm_topic(self.plate, event)
            self._bus.publish(topic, compose.alarm_message(event, self.run_no), retain=True, qos=1)

    def _announce_standing(self) -> None:
        """After every connection: what the broker keeps may be of before it, or nothing."""
        for event in self._standing.values():
            if event.to_state is not AlarmState.NORMAL:
                body = compose.alarm_message(event, self.run_no)
                topic = compose.alarm_topic(self.plate, event)
                self._bus.publish(topic, body, retain=True, qos=1)

    def _publish_peak(self, outcomes: Sequence[Outcome]) -> None:
        """The newest peak; the bus sends nothing unless it may."""
        if not outcomes or outcomes[-1].peak is None:
            return
        shown = self.session.monitor.shown_limit
        row = self._passing.get(shown.name) if shown else None
        body = compose.peak_message(
            outcomes[-1].peak, self.run_no, row.to_limit_s if row else None, self._causes
        )
        self._bus.publish(compose.topic_of(self.plate, "peak"), body)

    def _watch_record(self, now_s: float) -> None:
        """The alarm about the record, and what is to be done so that the plate is still seen."""
        tokens = list(self.record.drop_oldest(self._clock.utc_us()))
        stalled = now_s - self._message_s >= STALLED_AFTER_S and self._bus.connected
        if self.record.in_trouble and stalled and len(self.record.waiting.tokens) >= COMMIT_AT:
            tokens += self.record.release(self._clock.utc_us())
        self._bus.acknowledge(tokens)
        state = self.record.state(now_s)
        if state.says_other_than(self._kept):
            self._kept = state
            self.record.waiting.events.append(self.session.take_event(record_event(state)))

    def _watch_bus(self, now_s: float) -> None:
        self._bus.watch()
        while not self._bus.events.empty():
            event = self._bus.events.get()
            self._log.log(words.bus_level(event.what), "%s: %s", event.what, event.text)
            if event.what == "connected":
                self._announce_standing()
        if self._bus.connected:
            self._reminded_s = now_s
            return
        self._last_down_s = now_s
        if now_s - self._reminded_s >= REMIND_EVERY_S:
            self._reminded_s = now_s
            self._log.warning("still no broker at %s:%d", self._bus.host, self._bus.port)

    def _watch_clock(self) -> None:
        step_us = self._arrival.look()
        if step_us:
            self._note_clock(step_us, "this computer's clock was set")

    def _note_clock(self, offset_us: int, what: str) -> None:
        """One line and one row; intervals here never depend on this clock."""
        self._log.warning("%s by %+.0f s", what, offset_us / 1e6)
        self.record.note_clock(offset_us, what)

    def _calm_line(self, now_s: float) -> None:
        if now_s - self._calm_s < self._calm_every_s:
            return
        self._calm_s = now_s
        if self.latest is not None and not self.session.blind:
            self._log.info("%s", words.peak_line(self.latest))
