"""The commands that read a record, or write into it what a person decided."""

from __future__ import annotations

import difflib
import json
from argparse import Namespace
from dataclasses import asdict
from pathlib import Path
from typing import Any

from platewatch import compose
from platewatch.cli_words import moment
from platewatch.clock import SystemClock
from platewatch.errors import NoDataError, SettingsError
from platewatch.types import AlarmState
from platewatch.units import iso

STATE_WORDS = {
    AlarmState.UNACKNOWLEDGED: "NEW",
    AlarmState.ACKNOWLEDGED: "acknowledged",
    AlarmState.RETURNED_UNACKNOWLEDGED: "over, not acknowledged",
    AlarmState.LATCHED_UNACKNOWLEDGED: "over, latched, not acknowledged",
    AlarmState.LATCHED_ACKNOWLEDGED: "over, latched until reset",
    AlarmState.NORMAL: "normal",
}

ASKED_STATES = {
    "ack": (
        AlarmState.UNACKNOWLEDGED,
        AlarmState.RETURNED_UNACKNOWLEDGED,
        AlarmState.LATCHED_UNACKNOWLEDGED,
    ),
    "reset": (AlarmState.LATCHED_ACKNOWLEDGED,),
}
ACT_WORDS = {"ack": "acknowledges", "reset": "resets"}
TAKEN_UP = "a running daemon takes it up within seconds, else the next start does"


def alarms(arguments: Namespace) -> int:
    """List the alarms, or write down an acknowledgement."""
    words = list(arguments.words)
    if words and words[0] in ASKED_STATES:
        return _act(arguments, words[0], words[1:])
    with _record(arguments, words) as (store, plate):
        rows = store.alarm_list(plate or None, open_only=not arguments.all)
    if arguments.json:
        print(json.dumps([_alarm_object(row) for row in rows], indent=2, ensure_ascii=False))
        return 0
    for row in rows:
        print(_alarm_words(row))
    if not rows:
        print("no alarm on record" if arguments.all else "no alarm is active")
    return 0


def _record(arguments: Namespace, words: list[str], *, read_only: bool = True) -> _Opened:
    """The record of --db, or of the description that was named."""
    if arguments.db:
        return _Opened(arguments.db, arguments.plate, read_only)
    if not words:
        raise SettingsError("name the record: --db FILE, or a PLATE.toml")
    description = compose.describe(Path(words[0]))
    return _Opened(description.store.url, arguments.plate or description.plate.name, read_only)


class _Opened:
    """An open record and the plate that is meant in it."""

    def __init__(self, url: str, plate: str, read_only: bool) -> None:
        self._store = compose.open_store(url, create=False, read_only=read_only)
        self._url, self._plate = url, plate

    def __enter__(self) -> tuple[compose.Store, str]:
        try:
            there = self._store.plates()
            if self._plate and self._plate not in there:
                named = ", ".join(there) or "none yet"
                raise NoDataError(f"{self._url}: has no plate {self._plate!r}; it holds {named}")
            return self._store, self._plate
        except BaseException:
            self._store.close()
            raise

    def __exit__(self, *_: object) -> None:
        self._store.close()


def _act(arguments: Namespace, verb: str, words: list[str]) -> int:
    """Write down an acknowledgement or a reset for the daemon to take up."""
    what = ACT_WORDS[verb]
    if len(words) < 2:
        raise SettingsError(
            f"name the alarm and its subject: platewatch alarms {verb} peak-coming product "
            '--person "early shift" --db FILE'
        )
    if not arguments.person.strip():
        raise SettingsError(f"say who {what}: --person NAME")
    alarm, subject, *rest = words
    with _record(arguments, rest, read_only=False) as (store, plate):
        known = store.alarm_list(plate or None, open_only=False)
        meant = [r for r in known if (r.event.alarm, r.event.subject) == (alarm, subject)]
        if not meant:
            raise SettingsError(_unknown_alarm(alarm, subject, known))
        if len(meant) > 1:
            plates = ", ".join(row.plate for row in meant)
            raise SettingsError(f"several plates have this alarm ({plates}); say --plate NAME")
        state = meant[0].event.to_state
        if state not in ASKED_STATES[verb]:
            print(f"nothing to do for {alarm} {subject}: {STATE_WORDS.get(state, state)}")
            return 0
        person = arguments.person.strip()
        at_us = SystemClock().utc_us()
        store.act(meant[0].plate, at_us, person, verb, alarm, subject, arguments.reason)
    print(f"written down: {person} {what} {alarm} {subject}; {TAKEN_UP}")
    return 0


def answer(arguments: Namespace) -> int:
    """Write down an answer to the open question: evidence for the daemon, not a verdict."""
    if not arguments.person.strip():
        raise SettingsError("say who answers: --person NAME")
    with _record(
        arguments, [arguments.plate_file] if arguments.plate_file else [], read_only=False
    ) as (
        store,
        plate,
    ):
        plates = [plate] if plate else store.plates()
        if len(plates) != 1:
            raise SettingsError(f"the record holds {', '.join(plates)}; say --plate NAME")
        person, at_us = arguments.person.strip(), SystemClock().utc_us()
        store.act(plates[0], at_us, person, "answer", "", arguments.said, arguments.reason)
    print(f"written down: {person} answers {arguments.said}; {TAKEN_UP}")
    return 0


def _unknown_alarm(alarm: str, subject: str, known: list[compose.AlarmRow]) -> str:
    names = [f"{row.event.alarm} {row.event.subject}" for row in known]
    close = difflib.get_close_matches(f"{alarm} {subject}", names, 1, 0.5)
    hint = f"did you mean {close[0]}?" if close else "see platewatch alarms --all"
    return f"no alarm {alarm} {subject} on record; {hint}"


def _alarm_object(row: compose.AlarmRow) -> dict[str, Any]:
    return {"plate": row.plate, **asdict(row.event), "at": iso(row.event.at_us)}


def _alarm_words(row: compose.AlarmRow) -> str:
    event = row.event
    state = STATE_WORDS.get(event.to_state, event.to_state.replace("_", " "))
    priority = f" {event.priority.upper()}" if event.priority else ""
    text = f"{state}{priority}  {event.alarm} {event.subject}, plate {row.plate}"
    by = f" by {event.person}" if event.person else ""
    message = "" if event.person else f"\n  {event.message}"
    return f"{text}, since {iso(event.at_us)}{by}{message}"


def export(arguments: Namespace) -> int:
    """Write a table for other programs."""
    from platewatch import cli_export

    with _Opened(arguments.db, arguments.plate, True) as (store, plate):
        if not plate:
            plate = _only_plate(store, arguments.db)
        wish = cli_export.Wish(
            plate,
            Path(arguments.out),
            moment("--from", arguments.from_time),
            moment("--to", arguments.to_time),
        )
        match arguments.what:
            case "readings":
                count = cli_export.readings(store, wish)
            case "peaks":
                count = cli_export.peaks(store, wish)
            case "alarms":
                count = cli_export.alarm_events(store, wish)
            case _:
                at_us = moment("--at", arguments.at)
                if at_us is None:
                    raise SettingsError("say which moment: --at 2026-03-01T08:00:00Z")
                given = arguments.description
                count = cli_export.field(store, wish, at_us, Path(given) if given else None)
    print(f"{count} rows in {arguments.out}")
    return 0


def _only_plate(store: compose.Store, url: str) -> str:
    plates = store.plates()
    if not plates:
        raise NoDataError(f"{url}: holds no plate yet")
    if len(plates) > 1:
        raise SettingsError(f"{url}: holds several plates ({', '.join(plates)}); say --plate NAME")
    return plates[0]


def verify(arguments: Namespace) -> int:
    """Check a record; 1 on a finding."""
    with compose.open_store(arguments.db, create=False, read_only=True) as store:
        found = store.verify()
        gaps = {plate: store.gaps(plate) for plate in store.plates()}
    if arguments.json:
        told = {
            "ok": found.ok,
            "findings": list(found.findings),
            "heads": [asdict(head) for head in found.heads],
            "gaps": {plate: [asdict(gap) for gap in rows] for plate, rows in gaps.items()},
            "caution": found.caution,
        }
        print(json.dumps(told, indent=2))
        return 0 if found.ok else 1
    for finding in found.findings:
        print(f"finding: {finding}")
    for plate, rows in gaps.items():
        for gap in rows:
            print(f"gap: plate {plate}, {iso(gap.from_us)} to {iso(gap.to_us)}: {gap.what}")
    for head in found.heads:
        print(f"last row of {head.table}: number {head.seq}, hash {head.hash[:16]}…")
    print("the record is as it was written" if found.ok else f"{len(found.findings)} findings")
    print(found.caution)
    return 0 if found.ok else 1


def backup(arguments: Namespace) -> int:
    """Copy a record that may be in use."""
    with compose.open_store(arguments.db, create=False) as store:
        store.backup(Path(arguments.to))
    print(f"copied to {arguments.to}")
    return 0


def tidy(arguments: Namespace) -> int:
    """Retention now."""
    short, long = arguments.keep_readings_days, arguments.keep_days
    if not (short > 0 and long > 0):
        raise SettingsError("keeping times are days above 0")
    with compose.open_store(arguments.db, create=False) as store:
        done = store.tidy(SystemClock().utc_us(), short, long)
    if arguments.json:
        print(json.dumps(asdict(done)))
        return 0
    removed = ", ".join(f"{count} of {table}" for table, count in done.rows.items())
    print(f"removed: {removed}" if removed else "nothing is past its keeping time")
    return 0
