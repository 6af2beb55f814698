"""What one plate has to store, until it is stored: nothing is acknowledged before.

On a full disk the readings wait, unacknowledged, so that the broker keeps them; alarms
and peaks go on into the reserve.  Where the broker then stops sending, because it has
as much under way as it may, the plate comes first: readings are taken off it and held in
memory only, which is an alarm of its own.
"""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import Future, wait
from dataclasses import dataclass, field, replace

from platewatch import compose
from platewatch.daemon_words import Repeats
from platewatch.daemon_writer import Writer
from platewatch.errors import StorageError
from platewatch.session import Keeping, RecordState
from platewatch.types import BatchEvent, Outcome, Reading, Refused
from platewatch.units import iso

MOST_UNSTORED = 50_000  # readings held in memory while the record cannot be written
DROPPED_AT_ONCE = MOST_UNSTORED // 10
RETRY_EVERY_S = 3.0
FAILING_AFTER_S = 10.0  # a locked database is often free again before
STOP_WAIT_S = 12.0
MOST_KINDS = 500  # of dead letters kept apart in one run


@dataclass
class Unstored:
    """What waits for the next commit."""

    readings: list[Reading] = field(default_factory=list)
    events: list[BatchEvent] = field(default_factory=list)
    outcomes: list[Outcome] = field(default_factory=list)
    tokens: list[compose.Token] = field(default_factory=list)
    refused: dict[tuple[str, str, str], Refused] = field(default_factory=dict)

    def __bool__(self) -> bool:
        return bool(self.readings or self.events or self.outcomes or self.tokens or self.refused)

    def count(self, refused: Refused) -> None:
        """Add to the dead letters; beyond MOST_KINDS kinds they are counted together."""
        key = (refused.topic, refused.channel, refused.reason)
        if key not in self.refused and len(self.refused) >= MOST_KINDS:
            key = ("", "", refused.reason)
            refused = replace(refused, topic="", channel="")
        known = self.refused.get(key)
        if known is not None:
            count = known.count + refused.count
            refused = replace(refused, count=count, first_us=known.first_us)
        self.refused[key] = refused

    def count_refusal(self, refusal: compose.Refusal, seen_us: int) -> None:
        """Add one message, or one value of it, that could not be used."""
        topic, channel, reason = refusal.topic, refusal.channel, str(refusal.reason)
        told = refusal.detail, refusal.excerpt
        self.count(Refused(topic, channel, reason, 1, seen_us, seen_us, *told))

    def put_back(self, earlier: Unstored) -> None:
        """Before what has come since."""
        self.readings[:0] = earlier.readings
        self.events[:0] = earlier.events
        self.outcomes[:0] = earlier.outcomes
        self.tokens[:0] = earlier.tokens
        later, self.refused = self.refused, earlier.refused
        for refused in later.values():
            self.count(refused)


@dataclass(frozen=True)
class Settled:
    """What a round has brought to an end: these may be acknowledged, those announced."""

    tokens: Sequence[compose.Token] = ()
    outcomes: Sequence[Outcome] = ()


class PlateRecord:
    """One plate's way into its record."""

    def __init__(
        self,
        plate: str,
        writer: Writer,
        units: Mapping[str, str],
        log: logging.LoggerAdapter[logging.Logger],
    ) -> None:
        self.waiting = Unstored()
        self.writer = writer
        self._plate, self._units, self._log = plate, units, log
        self._writing: tuple[Unstored, Future[str]] | None = None
        self._repeats = Repeats()
        self._trouble_s: float | None = None
        self._retry_s = self._hold_s = float("-inf")
        self._why = ""
        self._held_since_us: int | None = None  # readings are in memory only since then
        self._lost = 0

    @property
    def is_writing(self) -> bool:
        return self._writing is not None

    @property
    def in_trouble(self) -> bool:
        return self._trouble_s is not None

    def state(self, now_s: float) -> RecordState:
        """How the record is being kept."""
        room = self.writer.room
        free = None if room.free_MB is None else round(room.free_MB, 1)
        days = None if room.days_left is None else round(room.days_left, 2)
        keeping = Keeping.WELL
        if self._held_since_us is not None:
            keeping = Keeping.LOSING
        elif self._has_failed_for_long(now_s):
            keeping = Keeping.FAILING
        why = self._why if self.in_trouble else ""
        return RecordState(keeping, room.is_little, free, days, why)

    def _has_failed_for_long(self, now_s: float) -> bool:
        if self._trouble_s is None:
            return False
        return self.writer.is_full or now_s - self._trouble_s >= FAILING_AFTER_S

    def turn(self, now_s: float, *, due: bool) -> Settled:
        """Take the result of the last commit; begin the next one if it is due."""
        settled = self._collect(now_s)
        if due and self._writing is None and self.waiting and now_s >= self._hold_s:
            self._begin(now_s)
        return settled

    def release(self, now_us: int) -> Sequence[compose.Token]:
        """Acknowledge what is not stored, so that the broker goes on sending."""
        tokens, self.waiting.tokens = self.waiting.tokens, []
        if self._held_since_us is None:
            self._held_since_us = now_us
            self._log.error(
                "the broker sends no more before something is acknowledged: %d readings are now "
                "held in memory only, so that the plate is still watched",
                len(self.waiting.readings),
            )
        return tokens

    def drop_oldest(self, now_us: int) -> Sequence[compose.Token]:
        """Where nothing is stored and memory's share is used up: the oldest readings go, and
        are counted.  A backlog may fill it between two commits that go well; it only waits."""
        is_stuck = self.in_trouble or self.writer.busy_s() >= FAILING_AFTER_S
        if not is_stuck or len(self.waiting.readings) <= MOST_UNSTORED:
            return ()
        tokens = self.release(now_us)
        del self.waiting.readings[:DROPPED_AT_ONCE]
        self._lost += DROPPED_AT_ONCE
        if self._repeats.due("lost", now_us / 1e6):
            self._log.error("%d readings lost so far: the record cannot be written", self._lost)
        return tokens

    def finish(self, now_s: float) -> Settled:
        """Store what is left, waiting for it; what could not be stored stays waiting."""
        first = self._wait(now_s)
        self._retry_s = float("-inf")
        if self.waiting:
            self._begin(now_s)
        last = self._wait(now_s)
        return Settled([*first.tokens, *last.tokens], [*first.outcomes, *last.outcomes])

    def _wait(self, now_s: float) -> Settled:
        if self._writing is not None:
            wait([self._writing[1]], STOP_WAIT_S)
        return self._collect(now_s)

    def _begin(self, now_s: float) -> None:
        batch, self.waiting = self.waiting, Unstored()
        if self.in_trouble and now_s < self._retry_s:
            # Alarms and peaks go on; readings are tried from time to time.
            self.waiting = replace(batch, events=[], outcomes=[])
            batch = Unstored(events=batch.events, outcomes=batch.outcomes)
            if not batch:
                return
        self._writing = batch, self.writer.submit(self._write, batch)

    def _write(self, batch: Unstored) -> str:
        """In the writing thread.  Empty when all is stored, else why the readings are not."""
        store, rest = self.writer.store, list(batch.refused.values())
        try:
            if self.writer.is_full and not self.writer.has_room_again():
                raise compose.DiskFullError(self._why)
            store.write(
                self._plate, batch.outcomes, batch.readings, self._units, batch.events, rest
            )
        except compose.DiskFullError as error:
            self.writer.full()
            if not batch.outcomes and not batch.events:
                raise
            store.write(self._plate, batch.outcomes, [], self._units, batch.events)
            return str(error)
        return ""

    def _collect(self, now_s: float) -> Settled:
        if self._writing is None or not self._writing[1].done():
            return Settled()
        (batch, done), self._writing = self._writing, None
        try:
            why = done.result()
        except StorageError as error:
            self.waiting.put_back(batch)
            self._hold_s = now_s + RETRY_EVERY_S
            self._failed(str(error), now_s)
            return Settled()
        if why:
            self.waiting.put_back(replace(batch, events=[], outcomes=[]))
            self._failed(why, now_s)
            return Settled(outcomes=batch.outcomes)
        if batch.readings or not self.waiting.readings:
            self._succeeded()
        return Settled(batch.tokens, batch.outcomes)

    def _failed(self, why: str, now_s: float) -> None:
        self._why, self._retry_s = why, now_s + RETRY_EVERY_S
        if self._trouble_s is None:
            self._trouble_s = now_s
        if self._repeats.due("store", now_s):
            self._log.error("record not written, nothing acknowledged, trying again: %s", why)

    def _succeeded(self) -> None:
        if self._trouble_s is None:
            return
        self._trouble_s, self._retry_s, self._hold_s = None, float("-inf"), float("-inf")
        self._log.info("the record is being written again")
        if self._held_since_us is None:
            return
        text = (
            f"readings were held in memory only since {iso(self._held_since_us)}, because the "
            f"record could not be written; {self._lost} of them are lost"
        )
        self.note(text)
        self._log.warning("%s", text)
        self._held_since_us, self._lost = None, 0

    def note(self, text: str) -> None:
        """A line in the log book, by the program itself."""
        at_us = self.writer.utc_us()
        self.attempt(lambda: self.writer.store.note(self._plate, at_us, "", text))

    def note_clock(self, offset_us: int, what: str) -> None:
        at_us = self.writer.utc_us()
        store = self.writer.store
        self.attempt(lambda: store.note_clock(self._plate, at_us, offset_us, what))

    def attempt(self, work: Callable[[], object]) -> None:
        """Write something small that the program can do without."""

        def tried() -> None:
            try:
                work()
            except StorageError as error:
                self._log.warning("not written down: %s", error)

        self.writer.submit(tried)
