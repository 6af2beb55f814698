"""The daemon: all plates in one thread, an orderly stop."""

from __future__ import annotations

import logging
import threading
from collections.abc import Callable, Sequence
from contextlib import ExitStack

from platewatch import compose
from platewatch.clock import Clock
from platewatch.daemon_plate import CALM_LINE_EVERY_S, PlateRun
from platewatch.errors import SettingsError

IDLE_S = 0.05

__all__ = ["PlateRun", "run_daemon"]


def run_daemon(
    descriptions: Sequence[compose.Description],
    clock: Clock,
    log: logging.Logger,
    stop: threading.Event,
    *,
    database: str = "",
    for_s: float | None = None,
    calm_s: float = CALM_LINE_EVERY_S,
    each_turn: Callable[[PlateRun], None] | None = None,
) -> None:
    """Run until `stop` is set, or for so many seconds of the clock.

    database: one record for all plates, else each description's own
    each_turn: is shown every plate after each of its rounds

    Raises StorageError where a record cannot be opened or another daemon holds it,
    SettingsError or PlateError where a description cannot be used.
    """
    for description in descriptions:
        if not description.bus.enabled:
            raise SettingsError(
                f"{description.path}: [bus] enabled = false, so there is nothing to watch"
            )
    monitors = [compose.build_monitor(description) for description in descriptions]
    with ExitStack() as stack:
        stores: dict[str, compose.Store] = {}
        for description in descriptions:
            url = database or description.store.url
            if url not in stores:
                stores[url] = stack.enter_context(compose.open_store(url))
                stack.enter_context(stores[url].hold_alone())
        runs = [
            PlateRun(each, monitor, stores[database or each.store.url], clock, log, calm_s)
            for each, monitor in zip(descriptions, monitors, strict=True)
        ]
        _turn_all(runs, clock, stop, for_s, each_turn)


def _turn_all(
    runs: Sequence[PlateRun],
    clock: Clock,
    stop: threading.Event,
    for_s: float | None,
    each_turn: Callable[[PlateRun], None] | None,
) -> None:
    started_s = clock.monotonic()
    for run in runs:
        run.start()
    while not stop.is_set():
        busy = False
        for run in runs:
            busy = run.turn() or busy
            if each_turn is not None:
                each_turn(run)
        if for_s is not None and clock.monotonic() - started_s >= for_s:
            break
        if not busy:
            stop.wait(IDLE_S)
    for run in runs:
        run.stop()
