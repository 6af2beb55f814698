"""The commands that run a plate: the daemon, the demonstration, the replay."""

from __future__ import annotations

import json
import signal
import sys
import threading
import warnings
from argparse import Namespace
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict
from pathlib import Path

from platewatch import compose
from platewatch.cli_words import moment, replay_summary, row_progress
from platewatch.clock import SystemClock
from platewatch.daemon import run_daemon
from platewatch.daemon_words import open_log
from platewatch.errors import SettingsError
from platewatch.units import TemperatureUnit


def run(arguments: Namespace) -> int:
    """Watch plates until told to stop; SIGHUP reads the descriptions again."""
    log = open_log(arguments.json_log)
    # An overflow shows as an estimate that is begun anew, which is told in plain words.
    warnings.simplefilter("ignore", RuntimeWarning)
    with stop_on_signals() as stop, set_on_hangup() as reload:
        run_daemon(
            _described(arguments),
            SystemClock(),
            log,
            stop,
            database=arguments.db,
            for_s=arguments.for_s,
            reload=reload,
            again=lambda: _described(arguments),
        )
    return 0


def _described(arguments: Namespace) -> list[compose.Description]:
    descriptions = [compose.describe(Path(name)) for name in arguments.plates]
    if arguments.broker:
        descriptions = [compose.with_broker(each, arguments.broker) for each in descriptions]
    names = [each.plate.name for each in descriptions]
    twice = next((name for name in names if names.count(name) > 1), "")
    if twice:
        raise SettingsError(f"plate {twice!r} is described twice; give each plate its own name")
    return descriptions


@contextmanager
def set_on_hangup() -> Iterator[threading.Event]:
    """An event that SIGHUP sets; what the signal did before comes back at the end."""
    event = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield event
        return
    before = signal.signal(signal.SIGHUP, lambda *_: event.set())
    try:
        yield event
    finally:
        signal.signal(signal.SIGHUP, before)


@contextmanager
def stop_on_signals() -> Iterator[threading.Event]:
    """An event that SIGTERM and SIGINT set; what they did before comes back at the end."""
    stop = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield stop
        return
    before = {
        number: signal.signal(number, lambda *_: stop.set())
        for number in (signal.SIGTERM, signal.SIGINT)
    }
    try:
        yield stop
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def demo(arguments: Namespace) -> int:
    """The simulated plate, watched."""
    from platewatch.demo import run_demo

    with stop_on_signals() as stop:
        return run_demo(
            arguments.batch,
            Path(arguments.data),
            stop,
            speed=arguments.speed,
            for_s=arguments.for_s,
            port=arguments.port,
        )


def replay(arguments: Namespace) -> int:
    """Recorded readings into a new record; 1 if an alarm was raised."""
    from platewatch.replay import Wishes, replay_log
    from platewatch.replay_compare import difference_lines, replay_both

    description = compose.describe(Path(arguments.plate))
    if arguments.speed is not None and not arguments.speed > 0:
        raise SettingsError(f"--speed {arguments.speed:g} is not above 0; leave it out to go fast")
    wishes = Wishes(
        from_us=moment("--from", arguments.from_time),
        to_us=moment("--to", arguments.to_time),
        speed=arguments.speed,
        columns=Path(arguments.columns) if arguments.columns else None,
        offset=arguments.offset,
    )
    log, out, clock = Path(arguments.log), Path(arguments.db), SystemClock()
    lines: list[str] = []
    found: dict[str, object] = {}
    with row_progress(sys.stderr) as told:
        if arguments.limits:
            limited = compose.with_limits(description, compose.describe(Path(arguments.limits)))
            summary, changed = replay_both(description, limited, log, out, clock, wishes, told)
            lines = difference_lines(changed, arguments.plate, arguments.limits)
            found = {"differences": [asdict(each) for each in changed]}
        else:
            summary = replay_log(description, log, out, clock, wishes, told)
    if arguments.json:
        print(json.dumps(summary.as_dict() | found, indent=2))
    else:
        unit = TemperatureUnit(description.unit)
        print("\n".join([replay_summary(summary, unit), *lines]))
    return 1 if summary.raised else 0
