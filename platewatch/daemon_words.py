"""What the daemon tells its log: one event a line, in plain words, and never a flood."""

from __future__ import annotations

import json
import logging
import sys
from collections.abc import Collection, Mapping
from typing import TextIO

from platewatch.types import AlarmEvent, AlarmState, Gap, PeakRow
from platewatch.units import iso

REPEAT_AFTER_S = 60.0
LOUD = frozenset({"refused", "subscription refused", "taken over", "queue full", "callback failed"})
TROUBLED = frozenset(
    {
        "no broker",
        "lost",
        "session forgotten",
        "sessions not kept",
        "silent",
        "network thread restarted",
    }
)


class JsonLines(logging.Formatter):
    """One JSON object a line: at, level, plate, text."""

    def format(self, record: logging.LogRecord) -> str:
        told = {
            "at": iso(round(record.created * 1e6)),
            "level": record.levelname.lower(),
            "plate": getattr(record, "plate", ""),
            "text": record.getMessage(),
        }
        if record.exc_info:
            told["trace"] = self.formatException(record.exc_info)
        return json.dumps(told, ensure_ascii=False)


class PlainLines(logging.Formatter):
    """Time, level, plate and text, for a journal or a terminal."""

    def format(self, record: logging.LogRecord) -> str:
        plate = getattr(record, "plate", "")
        at = self.formatTime(record, "%Y-%m-%d %H:%M:%S")
        head = f"{at} {record.levelname.lower():7}"
        text = f"{plate}: {record.getMessage()}" if plate else record.getMessage()
        trace = "\n" + self.formatException(record.exc_info) if record.exc_info else ""
        return f"{head} {text}{trace}"


def open_log(as_json: bool, stream: TextIO | None = None) -> logging.Logger:
    """The program's log on stderr; calling it again replaces the former one."""
    log = logging.getLogger("platewatch")
    handler = logging.StreamHandler(stream or sys.stderr)
    handler.setFormatter(JsonLines() if as_json else PlainLines())
    log.handlers[:] = [handler]
    log.propagate = False
    log.setLevel(logging.INFO)
    return log


class Repeats:
    """Lets a kind of line through at once, then once a minute with the count between."""

    def __init__(self) -> None:
        self._last: dict[str, float] = {}
        self._held: dict[str, int] = {}

    def due(self, kind: str, now_s: float, count: int = 1) -> int:
        """How many to tell of now; 0 while the line is held back."""
        held = self._held.get(kind, 0) + count
        last = self._last.get(kind)
        if last is not None and now_s - last < REPEAT_AFTER_S:
            self._held[kind] = held
            return 0
        self._last[kind], self._held[kind] = now_s, 0
        return held


def bus_level(what: str) -> int:
    """How loud an event of the connection is."""
    if what in LOUD:
        return logging.ERROR
    return logging.WARNING if what in TROUBLED else logging.INFO


def alarm_line(event: AlarmEvent) -> tuple[int, str]:
    """Level and words of an alarm's change of state."""
    name = f"{event.alarm} {event.subject}"
    match event.to_state:
        case AlarmState.UNACKNOWLEDGED:
            return logging.WARNING, f"ALARM {event.priority.upper()} {name}: {event.message}"
        case AlarmState.ACKNOWLEDGED:
            return logging.INFO, f"alarm {name} acknowledged by {event.person}"
        case AlarmState.RETURNED_UNACKNOWLEDGED:
            return logging.INFO, f"alarm {name} returned to normal, not yet acknowledged"
        case AlarmState.NORMAL:
            by = f", acknowledged by {event.person}" if event.person else ""
            return logging.INFO, f"alarm {name} is over{by}"
        case _:
            return logging.INFO, f"alarm {name}: {event.to_state.replace('_', ' ')}"


def first_line(heard: Mapping[str, int], channels: Collection[str]) -> str:
    """How many of the described channels have spoken; `heard` counts readings by channel."""
    sensors = [name for name in channels if name.startswith("sensor/")]
    duties = [name for name in channels if name.endswith("/duty")]
    read, asked = (sum(1 for n in names if heard.get(n)) for names in (sensors, duties))
    return f"first readings: {read} of {len(sensors)} sensors, {asked} of {len(duties)} duties"


def gap_line(gap: Gap) -> str:
    seconds = (gap.to_us - gap.from_us) / 1e6
    return f"gap of {seconds:.0f} s from {iso(gap.from_us)} to {iso(gap.to_us)}: {gap.what}"


def peak_line(row: PeakRow) -> str:
    """The hottest place now and ahead, as one calm line."""
    zone = f"zone {row.now_zone}, " if row.now_zone else ""
    now = f"{row.now_degC:.1f} °C ± {1.96 * row.now_sd_K:.1f} K (inferred)"
    ahead = f"{row.ahead_degC:.1f} °C ± {1.96 * row.ahead_sd_K:.1f} K"
    place = f"{zone}x {row.now_x_mm:.0f} mm, y {row.now_y_mm:.0f} mm"
    return f"hottest place {now} at {place}; coming peak {ahead} in {row.ahead_in_s / 60:.0f} min"
