"""The command `health`: is this record being kept as it should, in one answer for a machine."""

from __future__ import annotations

import json
from argparse import Namespace
from dataclasses import asdict, dataclass
from pathlib import Path

from platewatch import compose
from platewatch.clock import SystemClock
from platewatch.errors import NoDataError, SettingsError
from platewatch.types import AlarmState
from platewatch.units import iso

OLD_AFTER_S = 30.0
MOST_WAL_BYTES = 256 * 2**20  # four times what the writer lets it grow to
MOST_NOTES = 5
ACTIVE = (AlarmState.UNACKNOWLEDGED, AlarmState.ACKNOWLEDGED)
ABOUT_US = ("picture-blind", "store-failing")  # alarms that say that platewatch cannot do its work


@dataclass(frozen=True)
class Health:
    """findings: reasons against, each a line;  notes: what is worth knowing"""

    findings: tuple[str, ...]
    notes: tuple[str, ...]


def health(arguments: Namespace) -> int:
    """Say whether all is well; 1 with the reasons if it is not."""
    if arguments.max_age <= 0:
        raise SettingsError(f"--max-age {arguments.max_age:g} is not above 0 s")
    url, plate = _record(arguments)
    with compose.open_store(url, create=False, read_only=True) as store:
        plates = [plate] if plate else store.plates()
        if not plates or (plate and plate not in store.plates()):
            raise NoDataError(f"{url}: holds no plate {plate}".rstrip() + " yet")
        now_us = SystemClock().utc_us()
        found = [_of_store(store)]
        found += [_of_plate(store, name, now_us, arguments.max_age) for name in plates]
    findings = [line for each in found for line in each.findings]
    notes = [line for each in found for line in each.notes]
    if arguments.json:
        whole = asdict(Health(tuple(findings), tuple(notes)))
        print(json.dumps({"ok": not findings, **whole}, indent=2, ensure_ascii=False))
        return 1 if findings else 0
    for line in findings:
        print(f"not well: {line}")
    for line in notes:
        print(f"note: {line}")
    if not findings:
        print(f"well: {', '.join(plates)}")
    return 1 if findings else 0


def _record(arguments: Namespace) -> tuple[str, str]:
    """The record meant, and the plate where one is named."""
    words = [word for word in (arguments.db, arguments.plate_file) if word]
    if len(words) != 1:
        raise SettingsError("name the record, once: --db FILE, or a PLATE.toml")
    if arguments.db and not arguments.db.endswith(".toml"):
        return arguments.db, arguments.plate
    description = compose.describe(Path(words[0]))
    return description.store.url, arguments.plate or description.plate.name


def _of_store(store: compose.Store) -> Health:
    findings, notes = [], []
    if not store.is_held():
        findings.append("no daemon holds this record; start platewatch run")
    sizes = store.sizes()
    if sizes.wal > MOST_WAL_BYTES:
        findings.append(
            f"the write-ahead log has {sizes.wal / 2**20:.0f} MiB; a program keeps a transaction "
            "open on the record, end it"
        )
    notes.append(
        f"record {sizes.database / 1e6:.1f} MB, write-ahead log {sizes.wal / 1e6:.1f} MB, "
        f"{sizes.free / 1e6:.0f} MB free"
    )
    return Health(tuple(findings), tuple(notes))


def _of_plate(store: compose.Store, plate: str, now_us: int, max_age_s: float) -> Health:
    signs = store.signs(plate, now_us)
    return Health(
        tuple(
            f"plate {plate}: {line}" for line in _findings(store, plate, signs, now_us, max_age_s)
        ),
        tuple(f"plate {plate}: {line}" for line in _notes(signs, now_us)),
    )


def _findings(
    store: compose.Store, plate: str, signs: compose.Signs, now_us: int, max_age_s: float
) -> list[str]:
    found = []
    age_s = signs.peak_age_s(now_us)
    if age_s is None:
        found.append("no picture yet; look at the gateway and the topics")
    elif age_s > max_age_s:
        found.append(f"the last picture is {age_s:.0f} s old, more than {max_age_s:.0f} s")
    for event in store.alarm_states(plate):
        if event.alarm in ABOUT_US and event.to_state in ACTIVE:
            found.append(f"{event.alarm} {event.subject}: {event.message}")
    return found


def _notes(signs: compose.Signs, now_us: int) -> list[str]:
    notes = []
    if signs.last_seen_us is not None:
        notes.append(f"last reading arrived {(now_us - signs.last_seen_us) / 1e6:.0f} s ago")
    for note in signs.clock_notes[-MOST_NOTES:]:
        notes.append(f"clock, {iso(note.at_us)}: {note.what} by {note.offset_us / 1e6:+.0f} s")
    for refused in signs.refusals[:MOST_NOTES]:
        where = refused.channel or refused.topic or "readings"
        notes.append(
            f"not used since the beginning: {refused.count} times {where}: {refused.reason} "
            f"({refused.detail}), last at {iso(refused.last_us)}"
        )
    return notes
