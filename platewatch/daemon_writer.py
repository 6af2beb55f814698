"""The one thread that writes to one record, so that no plate ever waits for the disk."""

from __future__ import annotations

import logging
import threading
from collections.abc import Callable, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from typing import ParamSpec, TypeVar

from platewatch import compose
from platewatch.clock import Clock
from platewatch.errors import StorageError

LOOK_EVERY_S = 10.0
USUAL_BYTES_A_DAY = 77e6  # of one plate with a dozen thermocouples, until it is measured
MEASURED_AFTER_S = 3600.0
DAYS_AHEAD = 2.0  # room for less than this is told of
MB = 1e6
UPKEEP_EVERY_S = 86_400.0
UPKEEP_FIRST_S = 600.0

P = ParamSpec("P")
T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Room:
    """What is left on the disk of a record, and for how long; None where there is no disk."""

    free_MB: float | None = None
    days_left: float | None = None

    @property
    def is_little(self) -> bool:
        return self.days_left is not None and self.days_left < DAYS_AHEAD


class Writer:
    """The writing thread of one record, its room, and its daily upkeep.

    keeping: days that readings and all else are kept;  plates: whose days are sealed
    """

    def __init__(
        self,
        store: compose.Store,
        clock: Clock,
        log: logging.Logger,
        plates: Sequence[str],
        keeping: tuple[float, float],
    ) -> None:
        self.store = store
        self._clock, self._log, self._plates = clock, log, tuple(plates)
        self._keeping = keeping
        self._pool = ThreadPoolExecutor(1, "record")
        self._at_work_s: float | None = None  # since when the present job runs
        self._started_s = self._looked_s = clock.monotonic()
        self._upkeep_s = self._started_s + UPKEEP_FIRST_S
        self._upkeep: threading.Thread | None = None
        self.is_full = False  # and the reserve given up, which only alarms and peaks may use
        store.keep_reserve()
        sizes = store.sizes()
        self._began_with = sizes.database + sizes.wal
        self.room = self._measured(sizes)

    def submit(self, work: Callable[P, T], *args: P.args, **more: P.kwargs) -> Future[T]:
        """Have the thread do something after what it was asked before."""

        def timed() -> T:
            self._at_work_s = self._clock.monotonic()
            try:
                return work(*args, **more)
            finally:
                self._at_work_s = None

        return self._pool.submit(timed)

    def utc_us(self) -> int:
        return self._clock.utc_us()

    def busy_s(self) -> float:
        """Seconds that the present job has been at work."""
        begun_s = self._at_work_s
        return 0.0 if begun_s is None else self._clock.monotonic() - begun_s

    def turn(self, now_s: float) -> None:
        """Look at the room from time to time, and once a day start the upkeep."""
        if now_s - self._looked_s >= LOOK_EVERY_S:
            self._looked_s = now_s
            self.room = self._measured(self.store.sizes())
        if now_s >= self._upkeep_s and self._upkeep is None:
            self._upkeep = threading.Thread(target=self._keep_up, name="upkeep", daemon=True)
            self._upkeep.start()
        elif self._upkeep is not None and not self._upkeep.is_alive():
            self._upkeep, self._upkeep_s = None, now_s + UPKEEP_EVERY_S

    def full(self) -> None:
        """The disk is full: the reserve is for what matters most."""
        self.is_full = True
        self.store.give_reserve()

    def has_room_again(self) -> bool:
        """Could the reserve be made again?"""
        self.is_full = not self.store.keep_reserve()
        return not self.is_full

    def close(self) -> None:
        """After what is under way; the daily upkeep is left where it is, it goes on tomorrow."""
        self._pool.shutdown(wait=True)
        self.store.give_reserve()

    def _measured(self, sizes: compose.Sizes) -> Room:
        if not sizes.database:
            return Room()
        ran_s = self._clock.monotonic() - self._started_s
        rate = USUAL_BYTES_A_DAY * len(self._plates)
        if ran_s >= MEASURED_AFTER_S:
            grown = sizes.database + sizes.wal - self._began_with
            rate = max(0.1 * rate, grown / ran_s * 86_400)
        return Room(sizes.free / MB, sizes.free / rate)

    def _keep_up(self) -> None:
        """Seal finished days, remove what is past its keeping time; in short transactions."""
        try:
            for plate in self._plates:
                sealed = self.store.seal_days(plate, self._clock.utc_us())
                if sealed:
                    self._log.info("%d finished days of plate %s sealed", sealed, plate)
            done = self.store.tidy(self._clock.utc_us(), *self._keeping)
            if done.rows:
                told = ", ".join(f"{count} of {table}" for table, count in done.rows.items())
                self._log.info("past their keeping time and removed: %s", told)
        except StorageError as error:
            self._log.warning("daily upkeep of the record put off: %s", error)
