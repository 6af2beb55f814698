"""The log loop: recorded readings through the same estimator, into a new record."""

from __future__ import annotations

import hashlib
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass, field, replace
from heapq import merge
from pathlib import Path
from typing import Any

from platewatch import __version__, compose
from platewatch.clock import Clock
from platewatch.errors import NoDataError, PlatewatchError, SettingsError, StorageError
from platewatch.types import AlarmState, BatchEvent, Flag, Outcome, PeakRow, Reading
from platewatch.units import iso

SQLITE_MAGIC = b"SQLite format 3\0"
READINGS_A_COMMIT = 20_000
Told = Callable[[int, int], None]  # how many of how many rows are done


@dataclass(frozen=True)
class Wishes:
    """What of a log to replay and how.  Times are half-open, us; speed None: at full speed."""

    from_us: int | None = None
    to_us: int | None = None
    speed: float | None = None
    columns: Path | None = None
    offset: str = ""


@dataclass(frozen=True)
class Raised:
    """An alarm that was annunciated."""

    at: str
    alarm: str
    subject: str
    priority: str
    place: str
    message: str


@dataclass
class Summary:
    """What a replay found; counts of readings unless named otherwise."""

    rows: int = 0
    stored: int = 0
    refused: int = 0
    late: int = 0
    duplicates: int = 0
    backward: int = 0
    ticks: int = 0
    reasons: dict[str, int] = field(default_factory=dict)
    raised: list[Raised] = field(default_factory=list)
    hottest: PeakRow | None = None
    notes: list[str] = field(default_factory=list)

    def as_dict(self) -> dict[str, Any]:
        found = asdict(self)
        if self.hottest is not None:
            found["hottest"]["at"] = iso(self.hottest.at_us)
        return found


def replay_log(
    description: compose.Description,
    log: Path,
    out: Path,
    clock: Clock,
    wishes: Wishes | None = None,
    told: Told | None = None,
) -> Summary:
    """Replay a wide log (CSV or Parquet) or a record into the new record `out`.

    Raises NoDataError where there is nothing to replay, SettingsError or StorageError
    where the input cannot be read or the output not be written.
    """
    wishes, told = wishes or Wishes(), told or (lambda done, whole: None)
    is_record = _is_record(log)
    _check_out(out, log)
    if is_record and wishes.columns is not None:
        raise SettingsError(f"{log}: is a database, which needs no --columns")
    columns = compose.load_columns(wishes.columns) if wishes.columns else None
    with _new_record(out) as store:
        work = _Replay(description, store, Pace(clock, wishes.speed))
        if is_record:
            _replay_record(work, log, wishes, told)
        else:
            _replay_csv(work, log, wishes, columns, told)
        if not work.summary.rows:
            raise NoDataError(f"{log}: holds no reading between --from and --to")
        return work.summary


@contextmanager
def _new_record(out: Path) -> Iterator[compose.Store]:
    """A record that goes again where nothing came into it, so that a second try finds none."""
    store = compose.open_store(str(out))
    try:
        yield store
    except PlatewatchError:
        kept = (next(store.read_readings(plate), None) for plate in store.plates())
        is_bare = not any(kept)
        store.close()
        if is_bare:
            for ending in ("", "-wal", "-shm"):
                out.with_name(out.name + ending).unlink(missing_ok=True)
        raise
    finally:
        store.close()


def _is_record(log: Path) -> bool:
    try:
        with log.open("rb") as file:
            return file.read(len(SQLITE_MAGIC)) == SQLITE_MAGIC
    except FileNotFoundError:
        raise NoDataError(f"{log}: no such file") from None
    except OSError as error:
        raise NoDataError(f"{log}: cannot be read ({error.strerror})") from None


def _check_out(out: Path, log: Path) -> None:
    """A replay never mixes with a record that is there already."""
    if out.exists() and out.samefile(log):
        raise StorageError(f"{out}: is the log itself; name a new file for --db")
    if out.exists() and out.stat().st_size:
        raise StorageError(f"{out}: exists already; a replay writes a new record, name a new file")


class Pace:
    """Holds a replay to so many plate seconds a second; without a speed, not at all."""

    def __init__(self, clock: Clock, speed: float | None) -> None:
        self._clock, self._speed = clock, speed
        self._first_us: int | None = None
        self._started_s = 0.0

    def wait(self, at_us: int) -> None:
        if self._speed is None:
            return
        now_s = self._clock.monotonic()
        if self._first_us is None:
            self._first_us, self._started_s = at_us, now_s
        due_s = self._started_s + (at_us - self._first_us) / 1e6 / self._speed
        if due_s > now_s:
            time.sleep(due_s - now_s)


class _Replay:
    """What both kinds of log share: the session, the output and the summary."""

    def __init__(self, description: compose.Description, store: compose.Store, pace: Pace) -> None:
        self.description, self.store, self.pace = description, store, pace
        self.plate = description.plate.name
        self.monitor = compose.build_monitor(description)
        self.units = compose.build_routes(description).units
        self.summary = Summary()
        self.session: compose.Session
        self._readings: list[Reading] = []
        self._events: list[BatchEvent] = []
        self._outcomes: list[Outcome] = []

    def begin(self, started_us: int, closed_us: int | None) -> None:
        """A new run, from where the output ends."""
        self.flush()
        self.session = compose.resume_session(self.monitor, self.store, self.plate, closed_us)
        content = self.description.path.read_bytes()
        # Stored only where it is the description alone that was used.
        same = hashlib.sha256(content).hexdigest() == self.description.sha256
        self.store.start_run(
            self.plate,
            started_us,
            __version__,
            self.description.sha256,
            content if same else b"",
        )

    def take(self, readings: Iterable[Reading]) -> None:
        self._readings += [self.session.take(reading) for reading in readings]

    def take_event(self, event: BatchEvent) -> None:
        self._events.append(self.session.take_event(event))

    def keep(self, outcomes: Sequence[Outcome]) -> None:
        """Count and hold what the ticks produced, and store it from time to time."""
        for outcome in outcomes:
            self._note(outcome)
        self._outcomes += outcomes
        if len(self._readings) > READINGS_A_COMMIT:
            self.flush()

    def end(self, until_us: int | None) -> None:
        self.keep(self.session.finish(until_us))
        self.flush()
        self.summary.late += self.session.late
        self.summary.duplicates += self.session.duplicates

    def flush(self) -> None:
        if self._readings or self._outcomes or self._events:
            written = self.store.write(
                self.plate, self._outcomes, self._readings, self.units, self._events
            )
            self.summary.stored += written.readings
        self._readings, self._events, self._outcomes = [], [], []

    def _note(self, outcome: Outcome) -> None:
        summary, row = self.summary, outcome.peak
        summary.ticks += 1
        hottest = summary.hottest
        if row is not None and (hottest is None or row.now_degC > hottest.now_degC):
            summary.hottest = row
        for event in outcome.alarm_events:
            if event.to_state is AlarmState.UNACKNOWLEDGED:
                name = (event.alarm, event.subject, event.priority, event.place)
                summary.raised.append(Raised(iso(event.at_us), *name, event.message))


def _replay_csv(work: _Replay, log: Path, wishes: Wishes, columns: Any, told: Told) -> None:
    reader = compose.read_log(log, work.units, columns=columns, offset=wishes.offset)
    whole = reader.whole
    begun = False
    for number, row in enumerate(reader):
        if row.at_us is not None and _within(row.at_us, wishes):
            if not begun:
                work.begin(row.at_us, None)
                begun = True
            work.summary.rows += 1
            work.pace.wait(row.at_us)
            work.take(row.readings)
            if row.event is not None:
                work.take_event(row.event)
            work.keep(work.session.close())
        if number % 500 == 0:
            told(number, whole)
    if begun:
        work.end(None)
    report = reader.report()
    work.summary.refused = report.refused
    work.summary.reasons.update(dict(report.reasons))
    work.summary.backward = report.backward
    told(whole, whole)


def _within(at_us: int, wishes: Wishes) -> bool:
    after = wishes.from_us is None or at_us >= wishes.from_us
    return after and (wishes.to_us is None or at_us < wishes.to_us)


def _replay_record(work: _Replay, log: Path, wishes: Wishes, told: Told) -> None:
    """Every run of a record, each from where the one before ended, as live did it."""
    with compose.open_store(str(log), create=False, read_only=True) as source:
        runs = [run for run in source.runs(work.plate) if run.last_tick_us is not None]
        if not runs:
            there = ", ".join(source.plates()) or "no plate at all"
            raise NoDataError(f"{log}: has no run of plate {work.plate!r}; it holds {there}")
        if any(run.description_sha256 != work.description.sha256 for run in runs):
            work.summary.notes.append(
                "recorded with another description or other limits; results may differ"
            )
        first_us, last_us = runs[0].started_us, runs[-1].last_tick_us or 0
        closed_us: int | None = None
        for run in runs:
            until_us = run.last_tick_us
            work.begin(run.started_us, closed_us)
            _replay_run(work, source, closed_us, until_us, wishes, told, (first_us, last_us))
            closed_us = until_us
        left = source.read_readings(work.plate, last_us + 1)
        work.take(reading for reading in left if _within(reading.at_us, wishes))
        work.flush()


def _replay_run(
    work: _Replay,
    source: compose.Store,
    closed_us: int | None,
    until_us: int | None,
    wishes: Wishes,
    told: Told,
    span: tuple[int, int],
) -> None:
    """One run: readings in the order of their stamps, actions at the ticks that used them."""
    from_us = closed_us + 1 if closed_us is not None else None
    to_us = until_us + 1 if until_us is not None else None
    for done in source.actions(work.plate):
        at_us = done.applied_us
        if at_us is not None and _in_run(at_us, from_us, to_us) and _within(at_us, wishes):
            copied = replace(done.action, seq=_copy_action(work, done.action))
            work.session.act([copied], at_us)
    readings = ((r.at_us, 1, r) for r in source.read_readings(work.plate, from_us, to_us))
    events = ((e.at_us, 0, e) for e in source.events(work.plate, from_us, to_us))
    both: Iterator[tuple[int, int, Any]] = merge(events, readings, key=lambda item: item[:2])
    for number, (at_us, _, item) in enumerate(both):
        if not _within(at_us, wishes):
            continue
        work.summary.rows += 1
        if isinstance(item, BatchEvent):
            work.take_event(item)
            continue
        work.summary.refused += bool(item.flags & Flag.REFUSED)
        work.pace.wait(at_us)
        work.take([item])
        work.keep(work.session.close())
        if number % 2000 == 0:
            told(at_us - span[0], span[1] - span[0])
    work.end(_until(until_us, wishes))


def _in_run(at_us: int, from_us: int | None, to_us: int | None) -> bool:
    return (from_us is None or at_us >= from_us) and (to_us is None or at_us < to_us)


def _until(until_us: int | None, wishes: Wishes) -> int | None:
    """The run's last tick, unless the replay was asked to stop before."""
    if until_us is None or (wishes.to_us is not None and wishes.to_us <= until_us):
        return None
    return until_us


def _copy_action(work: _Replay, action: Any) -> int:
    """The person's action in the new record, which numbers it anew."""
    return work.store.act(
        work.plate,
        action.at_us,
        action.person,
        action.verb,
        action.alarm,
        action.subject,
        action.reason,
    )
