"""What other alarm limits would have changed: two lists of alarms side by side."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from enum import StrEnum
from itertools import zip_longest
from pathlib import Path
from tempfile import TemporaryDirectory

from platewatch import compose
from platewatch.clock import Clock
from platewatch.replay import Raised, Summary, Told, Wishes, replay_log
from platewatch.units import from_iso


class Change(StrEnum):
    """How an alarm differs under the other limits."""

    ADDED = "added"
    GONE = "gone"
    EARLIER = "earlier"
    LATER = "later"
    SAME = "same"


@dataclass(frozen=True)
class Difference:
    """One alarm under both sets of limits; before, after: when it was raised, or empty."""

    change: Change
    alarm: str
    subject: str
    before: str
    after: str
    by_s: float = 0.0


def differences(before: Iterable[Raised], after: Iterable[Raised]) -> list[Difference]:
    """The n-th raising of each alarm and subject under both, in order of time."""
    first, second = _by_name(before), _by_name(after)
    found = [
        _difference(name, one, other)
        for name in {**first, **second}
        for one, other in zip_longest(first[name], second[name], fillvalue="")
    ]
    return sorted(found, key=lambda d: from_iso(d.after or d.before))


def replay_both(
    described: compose.Description,
    limited: compose.Description,
    log: Path,
    out: Path,
    clock: Clock,
    wishes: Wishes,
    told: Told,
) -> tuple[Summary, list[Difference]]:
    """Replay under the other limits into `out`, and under its own for comparison.

    Both are replayed, rather than one compared with what live said, so that nothing but
    the limits differs.  Raises as `replay_log`.
    """
    summary = replay_log(limited, log, out, clock, wishes, told)
    with TemporaryDirectory() as folder:
        fast = replace(wishes, speed=None)
        own = replay_log(described, log, Path(folder) / "own.sqlite", clock, fast, told)
    return summary, differences(own.raised, summary.raised)


def _by_name(raised: Iterable[Raised]) -> dict[tuple[str, str], list[str]]:
    found: dict[tuple[str, str], list[str]] = defaultdict(list)
    for alarm in raised:
        found[alarm.alarm, alarm.subject].append(alarm.at)
    return found


def _difference(name: tuple[str, str], before: str, after: str) -> Difference:
    if not before or not after:
        return Difference(Change.GONE if before else Change.ADDED, *name, before, after)
    by_s = (from_iso(after) - from_iso(before)) / 1e6
    change = Change.LATER if by_s > 0 else Change.EARLIER if by_s < 0 else Change.SAME
    return Difference(change, *name, before, after, by_s)


def difference_lines(found: Sequence[Difference], own: str, other: str) -> list[str]:
    """The lines that a person reads; own, other: names of the two descriptions."""
    if all(each.change is Change.SAME for each in found):
        return [f"the alarms are the same with the limits of {own} and of {other}"]
    lines = [f"with the limits of {other} instead of those of {own}:"]
    return [*lines, *(f"  {_line(each)}" for each in found)]


def _line(each: Difference) -> str:
    name = f"{each.alarm} {each.subject}"
    match each.change:
        case Change.ADDED:
            return f"+ {each.after}  {name}: raised only now"
        case Change.GONE:
            return f"- {each.before}  {name}: no longer raised"
        case Change.SAME:
            return f"= {each.after}  {name}: at the same time"
        case _:
            return f"~ {each.after}  {name}: {abs(each.by_s):.0f} s {each.change}"
