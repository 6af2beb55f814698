"""The daemon: all plates in one thread, one writing thread a record, an orderly stop."""

from __future__ import annotations

import logging
import threading
from collections.abc import Callable, Sequence
from contextlib import ExitStack
from dataclasses import dataclass

from platewatch import compose
from platewatch.clock import Clock
from platewatch.daemon_plate import CALM_LINE_EVERY_S, PlateRun
from platewatch.daemon_service import Service
from platewatch.daemon_writer import Writer
from platewatch.errors import PlatewatchError, SettingsError

IDLE_S = 0.05
SHORT_S = 0.001
NETWORK_WITHIN_S = 90.0  # the network thread comes round once a second
WRITER_WITHIN_S = 60.0
AGAIN_AFTER_S = 5.0  # a plate that failed is begun anew, each time after twice as long
AGAIN_AT_MOST_S = 300.0

Eachturn = Callable[[PlateRun], None]
Again = Callable[[], Sequence[compose.Description]]


def run_daemon(
    descriptions: Sequence[compose.Description],
    clock: Clock,
    log: logging.Logger,
    stop: threading.Event,
    *,
    database: str = "",
    for_s: float | None = None,
    calm_s: float = CALM_LINE_EVERY_S,
    each_turn: Eachturn | None = None,
    reload: threading.Event | None = None,
    again: Again | None = None,
) -> None:
    """Run until `stop` is set, or for so many seconds of the clock.

    database: one record for all plates, else each description's own
    each_turn: is shown every plate after each of its rounds
    reload, again: when the event is set, the descriptions that `again` reads take over,
    or, if one of them cannot be used, the present ones stay

    Raises StorageError where a record cannot be opened or another daemon holds it,
    SettingsError or PlateError where a description cannot be used.
    """
    with ExitStack() as stack:
        daemon = _Daemon(clock, log, database, calm_s, stack)
        daemon.take(descriptions)
        service = Service()
        service.ready(f"watching {', '.join(daemon.plates)}")
        started_s = clock.monotonic()
        while not stop.is_set():
            if reload is not None and again is not None and reload.is_set():
                reload.clear()
                service.reloading()
                daemon.reload(again)
                service.ready(f"watching {', '.join(daemon.plates)}")
            busy = daemon.turn(each_turn)
            service.feed(daemon.progressed)
            if for_s is not None and clock.monotonic() - started_s >= for_s:
                break
            if not busy:
                stop.wait(SHORT_S if daemon.expects else IDLE_S)
        service.stopping()
        daemon.stop()


@dataclass
class _Watched:
    """One plate; run is None while it waits to be begun anew after a fault."""

    description: compose.Description
    monitor: compose.Monitor
    run: PlateRun | None = None
    again_s: float = 0.0
    wait_s: float = AGAIN_AFTER_S


class _Daemon:
    """The plates and records of one process."""

    def __init__(
        self, clock: Clock, log: logging.Logger, database: str, calm_s: float, stack: ExitStack
    ) -> None:
        self._clock, self._log, self._database, self._calm_s = clock, log, database, calm_s
        self._stack = stack
        self._writers: dict[str, Writer] = {}
        self._watched: list[_Watched] = []

    @property
    def plates(self) -> list[str]:
        return [each.description.plate.name for each in self._watched]

    @property
    def expects(self) -> bool:
        """Is it worth looking again at once?"""
        return any(each.run is not None and each.run.expects for each in self._watched)

    def take(self, descriptions: Sequence[compose.Description]) -> None:
        """Watch these; those that are watched as they are described go on as they were."""
        same = {each.description.sha256: each for each in self._watched}
        built = [
            same.get(each.sha256) or _Watched(each, compose.build_monitor(_enabled(each)))
            for each in descriptions
        ]
        for url in dict.fromkeys(self._url(each) for each in descriptions):
            if url not in self._writers:
                self._open(url, [each for each in descriptions if self._url(each) == url])
        for each in self._watched:
            if each not in built and each.run is not None:
                each.run.stop()
        self._watched = built
        for each in built:
            if each.run is None:
                self._begin(each)

    def reload(self, again: Again) -> None:
        """Read the descriptions again; all of them are used, or none."""
        try:
            self.take(again())
            self._log.info("descriptions read again; watching %s", ", ".join(self.plates))
        except PlatewatchError as error:
            for line in str(error).splitlines():
                self._log.error("not reloaded, going on with the present description: %s", line)

    def turn(self, each_turn: Eachturn | None) -> bool:
        """One round of every plate; true while one of them has more to do."""
        busy = False
        now_s = self._clock.monotonic()
        for writer in self._writers.values():
            writer.turn(now_s)
        for each in self._watched:
            busy = self._turn_one(each, each_turn, now_s) or busy
        return busy

    def progressed(self) -> bool:
        """Do the network threads and the writing threads move?  The estimators asked us."""
        runs = [each.run for each in self._watched if each.run is not None]
        network = all(run.network_s() < NETWORK_WITHIN_S for run in runs)
        return network and all(w.busy_s() < WRITER_WITHIN_S for w in self._writers.values())

    def stop(self) -> None:
        for each in self._watched:
            if each.run is not None:
                each.run.stop()

    def _turn_one(self, each: _Watched, each_turn: Eachturn | None, now_s: float) -> bool:
        """A fault of our own in one plate ends that plate's run, never the others'."""
        if each.run is None and now_s < each.again_s:
            return False
        try:
            if each.run is None:
                self._begin(each)
            assert each.run is not None
            busy = each.run.turn()
            if each_turn is not None:
                each_turn(each.run)
            return busy
        except Exception as error:
            self._failed(each, error, now_s)
            return False

    def _failed(self, each: _Watched, error: Exception, now_s: float) -> None:
        name, ours = each.description.plate.name, not isinstance(error, PlatewatchError)
        self._log.error(
            "plate %s stopped (%s); begun anew in %.0f s, nothing is acknowledged meanwhile",
            name,
            f"a fault of platewatch: {error!r}" if ours else error,
            each.wait_s,
            exc_info=ours,
        )
        if each.run is not None:
            each.run.abandon()
        each.run, each.again_s = None, now_s + each.wait_s
        each.wait_s = min(2 * each.wait_s, AGAIN_AT_MOST_S)

    def _begin(self, each: _Watched) -> None:
        writer = self._writers[self._url(each.description)]
        each.run = PlateRun(
            each.description, each.monitor, writer, self._clock, self._log, self._calm_s
        )
        each.run.start()

    def _open(self, url: str, described: Sequence[compose.Description]) -> None:
        store = self._stack.enter_context(compose.open_store(url))
        self._stack.enter_context(store.hold_alone())
        kept = described[0].store
        writer = Writer(
            store,
            self._clock,
            self._log,
            [each.plate.name for each in described],
            (kept.keep_readings_days, kept.keep_days),
        )
        self._stack.callback(writer.close)
        self._writers[url] = writer

    def _url(self, description: compose.Description) -> str:
        return self._database or description.store.url


def _enabled(description: compose.Description) -> compose.Description:
    if not description.bus.enabled:
        raise SettingsError(
            f"{description.path}: [bus] enabled = false, so there is nothing to watch"
        )
    return description
