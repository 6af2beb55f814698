"""The alarm `store-failing`: is the record being kept, and is there room for it?

What the daemon finds out about its record reaches the estimator as a batch event
"record" with the time at which it acts, so that a replay raises the same alarms.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from enum import StrEnum

from platewatch.monitor.alarms import Condition, Verdict
from platewatch.monitor.limits import Priority
from platewatch.types import BatchEvent

RECORD_EVENT = "record"
ALARM = "store-failing"
OFF_DELAY_US = 60_000_000


class Keeping(StrEnum):
    """How the record is being kept, from good to bad."""

    WELL = "well"
    FAILING = "failing"  # nothing is acknowledged, so the broker keeps what is not stored
    LOSING = "losing"  # only this program's memory has it, or nothing


@dataclass(frozen=True, slots=True)
class RecordState:
    """free_MB, days_left: room on the disk of the record; why: what the database said"""

    keeping: Keeping = Keeping.WELL
    little_room: bool = False
    free_MB: float | None = None
    days_left: float | None = None
    why: str = ""

    @property
    def is_well(self) -> bool:
        return self.keeping is Keeping.WELL and not self.little_room

    def says_other_than(self, before: RecordState) -> bool:
        """Is this worth telling after `before`?"""
        return (self.keeping, self.little_room) != (before.keeping, before.little_room)


def record_event(state: RecordState) -> BatchEvent:
    """To be given to the ticker, which stamps it with the time at which it acts."""
    detail = {
        "keeping": state.keeping.value,
        "little_room": state.little_room,
        "free_MB": state.free_MB,
        "days_left": state.days_left,
        "why": state.why,
    }
    return BatchEvent(0, RECORD_EVENT, json.dumps(detail))


def record_state(event: BatchEvent) -> RecordState:
    """What `record_event` said; a text it did not write means that all is well."""
    try:
        found = json.loads(event.detail)
        return RecordState(
            Keeping(found["keeping"]),
            bool(found["little_room"]),
            found["free_MB"],
            found["days_left"],
            str(found["why"]),
        )
    except (ValueError, KeyError, TypeError):
        return RecordState()


def store_failing(state: RecordState) -> list[Condition]:
    """Three instances: room and record (low), and readings that get lost (medium)."""
    failing = state.keeping is not Keeping.WELL
    losing = state.keeping is Keeping.LOSING
    return [
        _condition("room", Priority.LOW, state.little_room, _room_text(state), state.free_MB),
        _condition("record", Priority.LOW, failing, _record_text(state), None),
        _condition("readings", Priority.MEDIUM, losing, _readings_text(state), None),
    ]


def _condition(
    subject: str, priority: Priority, on: bool, text: str, value: float | None
) -> Condition:
    return Condition(
        alarm=ALARM,
        subject=subject,
        verdict=Verdict.ON if on else Verdict.OFF,
        priority=priority,
        place="the record",
        message=text,
        value=value,
        off_delay_us=OFF_DELAY_US,
    )


def _room_text(state: RecordState) -> str:
    days = "" if state.days_left is None else f", enough for {_days(state.days_left)}"
    return (
        f"Room for the record is running out: {state.free_MB or 0:.0f} MB free{days}. "
        "Make room on its disk; platewatch tidy removes what is past its keeping time."
    )


def _record_text(state: RecordState) -> str:
    return (
        f"The record cannot be written: {state.why}. Readings wait at the broker; alarms and "
        "peaks are kept as long as there is any room. The plate is still watched."
    )


def _readings_text(state: RecordState) -> str:
    return (
        f"Readings are not being recorded: {state.why}. They are only held in memory, and the "
        "oldest go first; a batch made now cannot be proved later. The plate is still watched."
    )


def _days(days: float) -> str:
    return f"about {days:.0f} days" if days >= 2 else f"about {24 * days:.0f} hours"
