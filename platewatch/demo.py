"""The demonstration: broker, simulated plate and daemon on one machine, in one hurry.

The plate is simulated by another program with physics of its own; what it tells of
the truth is marked so, and platewatch never sees it.
"""

from __future__ import annotations

import importlib.resources
import logging
import math
import queue
import re
import subprocess
import sys
import textwrap
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path

from platewatch import compose
from platewatch.clock import ScaledClock
from platewatch.daemon import run_daemon
from platewatch.daemon_plate import PlateRun
from platewatch.errors import SettingsError, StorageError
from platewatch.types import AlarmState

PLATE_FILE = "demo-table.toml"
LASTS_S = 110.0  # of your time
STATUS_EVERY_S = 15.0  # of your time
SAMPLE_S = 2.0
WIDTH = 100
# What part of a batch is worth watching: from, to (s of the batch).
SPANS = {
    "clean": (300.0, 2500.0),
    "announced-load": (4800.0, 6500.0),
    "cold-load": (4800.0, 6500.0),
    "zone-stays-on": (4800.0, 5900.0),
    "zone-not-heating": (4800.0, 6300.0),
    "loose-sensor": (4800.0, 6200.0),
    "reversed-sensor": (0.0, 1900.0),
}
DEFAULT = "cold-load"
SLACK_S = 0.5  # a busy machine may hold a message up this long, whatever the speed
AT = re.compile(r"\bat (\d+) s\b(, [+-]\d+ s after the incident)?,?")
PASSES = re.compile(r"(true peak|hottest reading) passes ([\d.]+) degC")


@dataclass
class Story:
    """What happened, in seconds of the batch.

    alarms: (when, limit or zone, kind) as annunciated;  passed: (what, limit) to when
    hottest_reading: degC and sensor, the highest that any thermocouple showed
    """

    alarms: list[tuple[float, str, str]] = field(default_factory=list)
    passed: dict[tuple[str, float], float] = field(default_factory=dict)
    hottest_reading: tuple[float, str] = (-math.inf, "")


def demo_plate() -> Path:
    """The description of the demo table: beside the source, else as it was installed."""
    beside = Path(__file__).resolve().parent.parent / "config" / PLATE_FILE
    if beside.is_file():
        return beside
    try:
        installed = importlib.resources.files("platewatch_config") / PLATE_FILE
    except (ModuleNotFoundError, NotADirectoryError):
        installed = None
    if installed is None or not installed.is_file():
        raise SettingsError(f"{PLATE_FILE} was not installed; run the demo from a clone")
    return Path(str(installed))


def run_demo(
    batch: str,
    data: Path,
    stop: threading.Event,
    *,
    speed: float | None = None,
    for_s: float | None = None,
    port: int = 0,
    say: Callable[[str], None] = print,
) -> int:
    """Show one batch; the exit code.

    speed: plate seconds per second;  for_s: end after so many seconds of yours
    Raises SettingsError, StorageError or NoDataError where it cannot start.
    """
    batch = batch or DEFAULT
    if batch not in SPANS:
        raise SettingsError(f"no batch {batch!r}; choose one of {', '.join(SPANS)}")
    begin_s, end_s = SPANS[batch]
    speed = (end_s - begin_s) / LASTS_S if speed is None else speed
    if not 0 < speed <= 1000:
        raise SettingsError(f"--speed {speed:g} is not between 0 and 1000")
    record = _record_file(data, batch)
    plate = demo_plate()
    description = compose.describe(plate)
    with compose.EmbeddedBroker(port) as broker:
        description = compose.with_broker(description, f"127.0.0.1:{broker.port}")
        description = compose.with_patience(description, SLACK_S * speed)
        clock = ScaledClock(time.time_ns() // 1000, time.monotonic(), speed)
        stage = _Stage(description, begin_s, clock, say)
        _introduce(say, batch, speed, begin_s, record)
        command = _simulator(batch, plate, broker.port, begin_s, end_s, clock)
        with _told_by(command) as lines:
            ended = _Ended(lines, stage, stop, for_s, end_s)
            run_daemon(
                [description],
                clock,
                stage.log,
                stop,
                database=str(record),
                calm_s=math.inf,
                each_turn=ended,
            )
        _close(say, stage.story, description, record, plate)
    return 0


def _record_file(data: Path, batch: str) -> Path:
    try:
        data.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise StorageError(
            f"{data}: cannot be made ({error.strerror}); name a folder you may write to: --data DIR"
        ) from None
    return data / f"{batch}-{datetime.now(UTC):%Y%m%d-%H%M%S}.sqlite"


def _simulator(
    batch: str, plate: Path, port: int, begin_s: float, end_s: float, clock: ScaledClock
) -> list[str]:
    shared = f"{clock.origin_us}:{clock.origin_monotonic!r}:{clock.speed!r}"
    options = {
        "--publish": f"127.0.0.1:{port}",
        "--from": f"{begin_s:g}",
        "--until": f"{end_s:g}",
        "--clock": shared,
    }
    words = [word for option in options.items() for word in option]
    return [sys.executable, "-m", "sim_sensors", batch, str(plate), *words, "--tell"]


@contextmanager
def _told_by(command: list[str]) -> Iterator[queue.SimpleQueue[str | None]]:
    """The lines a program prints while it runs, then None; it ends with the context."""
    lines: queue.SimpleQueue[str | None] = queue.SimpleQueue()
    program = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True)

    def listen() -> None:
        assert program.stdout is not None
        for line in program.stdout:
            lines.put(line.rstrip())
        lines.put(None)

    listener = threading.Thread(target=listen, daemon=True)
    listener.start()
    try:
        yield lines
    finally:
        program.terminate()
        program.wait()
        listener.join()
        assert program.stdout is not None
        program.stdout.close()


class _Stage(logging.Handler):
    """Prints what the daemon logs, with the time of the batch before it."""

    def __init__(
        self,
        description: compose.Description,
        begin_s: float,
        clock: ScaledClock,
        say: Callable[[str], None],
    ) -> None:
        super().__init__(logging.INFO)
        self.story = Story()
        self.log = logging.Logger("platewatch.demo", logging.INFO)
        self.log.addHandler(self)
        self._sensors = [sensor.name for sensor in description.plate.sensors]
        self._begin_s, self._clock, self._say = begin_s, clock, say
        self._first_us: int | None = None

    def batch_s(self, at_us: int) -> float | None:
        """Seconds of the batch at a source time; None before the first reading."""
        if self._first_us is None:
            return None
        return self._begin_s + SAMPLE_S + (at_us - self._first_us) / 1e6

    def emit(self, record: logging.LogRecord) -> None:
        self.tell(self.batch_s(self._clock.utc_us()), record.getMessage())

    def tell(self, at_s: float | None, text: str) -> None:
        stamp = "  --:--" if at_s is None else f"{int(at_s) // 60:4d}:{int(at_s) % 60:02d}"
        self._say(textwrap.fill(f"{stamp}  {text}", WIDTH, subsequent_indent=" " * 9))

    def watch(self, run: PlateRun) -> None:
        """Take in what one round of the daemon brought."""
        for outcome in run.recent:
            if self._first_us is None and outcome.peak is not None:
                self._first_us = outcome.at_us
            for event in outcome.alarm_events:
                at_s = self.batch_s(self._clock.utc_us())
                if event.to_state is AlarmState.UNACKNOWLEDGED and at_s is not None:
                    self.story.alarms.append((at_s, event.subject, event.alarm))
        self.story.hottest_reading = max(self.story.hottest_reading, self.hottest(run))

    def hottest(self, run: PlateRun) -> tuple[float, str]:
        """The highest of the last readings, and whose it is."""
        shown = zip(run.session.state.heard.degC.tolist(), self._sensors, strict=True)
        known = [(degC, name) for degC, name in shown if math.isfinite(degC)]
        return max(known, default=(-math.inf, ""))

    def status(self, run: PlateRun) -> None:
        row = run.latest
        if row is None:
            return
        degC, sensor = self.hottest(run)
        zone = f" in zone {row.now_zone}" if row.now_zone else ""
        self.tell(
            self.batch_s(self._clock.utc_us()),
            f"hottest reading {degC:.1f} °C ({sensor}, measured); hottest place "
            f"{row.now_degC:.1f} °C ± {1.96 * row.now_sd_K:.1f} K{zone} (inferred); coming peak "
            f"{row.ahead_degC:.1f} °C ± {1.96 * row.ahead_sd_K:.1f} K",
        )

    def truth(self, line: str) -> None:
        """One line of the simulator; times in it become the time before it."""
        found = AT.search(line)
        if found is None:
            return
        at_s = float(found[1])
        passed = PASSES.search(line)
        if passed:
            self.story.passed.setdefault((passed[1], float(passed[2])), at_s)
        words = AT.sub("", line, count=1).replace("  ", " ").strip()
        self.tell(at_s, words if words.startswith("truth") else words.replace("batch", "truth", 1))


class _Ended:
    """After each round: pass lines on, show the status, end with the simulation."""

    def __init__(
        self,
        lines: queue.SimpleQueue[str | None],
        stage: _Stage,
        stop: threading.Event,
        for_s: float | None,
        end_s: float,
    ) -> None:
        self._lines, self._stage, self._stop = lines, stage, stop
        self._end_s = end_s
        self._until = math.inf if for_s is None else time.monotonic() + for_s
        self._status = time.monotonic() + STATUS_EVERY_S

    def __call__(self, run: PlateRun) -> None:
        now = time.monotonic()
        self._stage.watch(run)
        while not self._lines.empty():
            line = self._lines.get()
            if line is None:
                self._until = min(self._until, now)
            elif line.startswith("sim-sensors:"):
                self._stage.tell(None, line)
            else:
                self._stage.truth(line)
        if now >= self._status:
            self._status = now + STATUS_EVERY_S
            self._stage.status(run)
        last = self._stage.batch_s(run.recent[-1].at_us) if run.recent else None
        if now >= self._until or (last is not None and last >= self._end_s - SAMPLE_S):
            self._stop.set()


def _introduce(
    say: Callable[[str], None], batch: str, speed: float, begin_s: float, record: Path
) -> None:
    say(f"A simulated plate, batch {batch}, {speed:.3g} times as fast as real time.")
    say(f"It is simulated up to {begin_s / 60:.0f} min first, which takes a few seconds.")
    say("Time of the batch (min:s) stands before each line. Lines marked truth are what the")
    say("simulated plate really does; platewatch sees only thermocouples and duties.")
    say(f"Record: {record}. Ctrl-C ends it.")
    say("")


def _close(
    say: Callable[[str], None],
    story: Story,
    description: compose.Description,
    record: Path,
    plate: Path,
) -> None:
    degC, sensor = story.hottest_reading
    limits = [x for x in description.alarm_limits if x.kind == "peak" and not x.record_only]
    say("")
    for limit in limits:
        _close_limit(say, story, limit.name, limit.value)
    if math.isfinite(degC):
        say(f"The hottest reading of any thermocouple was {degC:.1f} °C ({sensor}).")
    say("Look at the record:")
    say(f"  platewatch alarms --all --db {record}")
    say(f"  platewatch export peaks --db {record} --out peaks.csv")
    say(f"  platewatch replay {plate} {record} --db again.sqlite")


def _close_limit(say: Callable[[str], None], story: Story, name: str, value: float) -> None:
    """Truth, thermocouples and platewatch against one alarm limit."""
    true_s = story.passed.get(("true peak", value))
    read_s = story.passed.get(("hottest reading", value))
    told = [at_s for at_s, subject, alarm in story.alarms if subject == name]
    say(f"Alarm limit {name}, {value:g} °C:")
    truth = "the hottest place never passed it" if true_s is None else f"passed at {_mmss(true_s)}"
    say(f"  truth:         {truth}")
    reading = "no reading passed it" if read_s is None else f"a reading passed at {_mmss(read_s)}"
    say(f"  thermocouples: {reading}")
    if not told:
        say("  platewatch:    said nothing about it")
        return
    lead = "" if true_s is None else f", {true_s - told[0]:+.0f} s before the truth passed it"
    say(f"  platewatch:    said so at {_mmss(told[0])}{lead}")


def _mmss(at_s: float) -> str:
    return f"{int(at_s) // 60}:{int(at_s) % 60:02d}"
