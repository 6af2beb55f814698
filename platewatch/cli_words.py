"""Results as a person reads them on a terminal."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TextIO

from platewatch.errors import SettingsError
from platewatch.replay import Summary
from platewatch.units import TemperatureUnit, from_iso, iso, written, written_difference

MOST_ALARMS_LISTED = 30


def moment(option: str, text: str) -> int | None:
    """A time argument as integer us UTC; None where it was left out.

    Raises SettingsError for what is no time with an offset.
    """
    if not text:
        return None
    try:
        return from_iso(text)
    except ValueError as error:
        raise SettingsError(
            f"{option} {text!r} is no time ({error}); write 2026-03-01T08:00:00Z"
        ) from None


@contextmanager
def row_progress(stream: TextIO) -> Iterator[Callable[[int, int], None]]:
    """A progress bar, on a terminal only."""
    if not stream.isatty():
        yield lambda done, whole: None
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(file=stream), transient=True) as bar:
        task = bar.add_task("replay", total=None)
        yield lambda done, whole: bar.update(task, completed=done, total=max(whole, 1))


def replay_summary(summary: Summary, unit: TemperatureUnit = TemperatureUnit.DEGC) -> str:
    """The closing lines of a replay."""
    lines = [
        f"{summary.rows} rows, {summary.ticks} ticks; {summary.stored} readings stored, "
        f"{summary.refused} refused, {summary.late} late, {summary.duplicates} duplicates, "
        f"{summary.backward} steps back in time"
    ]
    lines += [f"refused {count} times: {reason}" for reason, count in summary.reasons.items()]
    lines += summary.notes
    row = summary.hottest
    if row is not None:
        place = f"x {row.now_x_mm:.0f} mm, y {row.now_y_mm:.0f} mm"
        zone = f"zone {row.now_zone}, " if row.now_zone else ""
        lines.append(
            f"hottest place {written(row.now_degC, unit)} ± "
            f"{written_difference(1.96 * row.now_sd_K, unit)} (inferred) "
            f"at {iso(row.at_us)}, {zone}{place}"
        )
    if not summary.raised:
        return "\n".join([*lines, "no alarm was raised"])
    lines.append(f"{len(summary.raised)} alarms were raised:")
    for raised in summary.raised[:MOST_ALARMS_LISTED]:
        head = f"{raised.at}  {raised.priority.upper():6} {raised.alarm} {raised.subject}"
        lines.append(f"{head}: {raised.message}")
    if len(summary.raised) > MOST_ALARMS_LISTED:
        lines.append(f"… and {len(summary.raised) - MOST_ALARMS_LISTED} more in the record")
    return "\n".join(lines)
