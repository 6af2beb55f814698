"""`platewatch health`: one answer and its reasons for a service manager."""

from __future__ import annotations

import json
import time
from pathlib import Path

import pytest
from _pytest.capture import CaptureFixture

from platewatch.adapters.storage import Store
from platewatch.cli import main
from platewatch.types import AlarmEvent, AlarmState, Outcome, PeakRow, Reading, Refused

Cli = CaptureFixture[str]
N, U = AlarmState.NORMAL, AlarmState.UNACKNOWLEDGED


def peak(at_us: int) -> PeakRow:
    return PeakRow(
        at_us, 120.0, 1.0, 0, 0, "Z1", 121.0, 1.0, 60.0, 0, 0, "Z1", 135.0, 0.0, None, ""
    )


def filled(path: Path, age_s: float, source_ahead_s: float = 0.0, blind: bool = False) -> Path:
    """A record whose last picture is so old, by this computer's clock."""
    seen_us = time.time_ns() // 1000 - round(age_s * 1e6)
    at_us = seen_us + round(source_ahead_s * 1e6)
    event = AlarmEvent(
        at_us, "picture-blind", "plate", "", N, U, "medium", None, None, "", "Blind for 12 s."
    )
    refused = Refused("plates/t/x", "", "unknown channel", 7, seen_us, seen_us, "x", "'1'")
    with Store.open(str(path)) as store:
        store.start_run("t", at_us, "0", "")
        events = (event,) if blind else ()
        outcome = Outcome(at_us, peak=peak(at_us), alarm_events=events)
        readings = [Reading(at_us, "sensor/T1", 120.0, seen_us)]
        store.write("t", [outcome], readings, {"sensor/T1": "degC"}, refusals=[refused])
        store.note_clock("t", seen_us, -90_000_000, "this computer's clock was set")
    return path


def told(path: Path, capfd: Cli, held: bool = True) -> tuple[int, dict[str, list[str]]]:
    capfd.readouterr()
    with Store.open(str(path)) as store:
        if held:
            with store.hold_alone():
                code = main(["health", "--db", str(path), "--json"])
        else:
            code = main(["health", "--db", str(path), "--json"])
    return code, json.loads(capfd.readouterr().out)


def test_a_record_that_a_daemon_keeps_is_well(tmp_path: Path, capfd: Cli) -> None:
    """Exit code 0; clock notes and dead letters are told, but are no finding."""
    code, found = told(filled(tmp_path / "r.sqlite", 3.0), capfd)
    assert (code, found["findings"]) == (0, [])
    assert any("clock was set by -90 s" in note for note in found["notes"])
    assert any("7 times plates/t/x: unknown channel" in note for note in found["notes"])


@pytest.mark.parametrize(
    ("age_s", "ahead_s", "code"), [(100, 0, 1), (3, 90, 0), (100, 90, 1), (3, -90, 0)]
)
def test_the_age_of_the_picture_does_not_hang_on_the_sources_clock(
    tmp_path: Path, capfd: Cli, age_s: float, ahead_s: float, code: int
) -> None:
    """A gateway whose clock is off makes no fresh picture old and no old one fresh."""
    found = told(filled(tmp_path / "r.sqlite", age_s, ahead_s), capfd)
    assert found[0] == code
    assert bool(code) == any("is 100 s old" in line for line in found[1]["findings"])


def test_a_blind_plate_and_a_missing_daemon_are_findings(tmp_path: Path, capfd: Cli) -> None:
    """Exit code 1, one line for each reason."""
    code, found = told(filled(tmp_path / "r.sqlite", 3.0, blind=True), capfd, held=False)
    assert code == 1
    assert found["findings"] == [
        "no daemon holds this record; start platewatch run",
        "plate t: picture-blind plate: Blind for 12 s.",
    ]


def test_a_record_that_is_not_there_is_an_error_of_storage(tmp_path: Path, capfd: Cli) -> None:
    """Exit code 4 and one line."""
    assert main(["health", "--db", str(tmp_path / "none.sqlite")]) == 4
    assert "no such database" in capfd.readouterr().err


def test_health_names_one_record(capfd: Cli) -> None:
    """Exit code 2 where none, or two, are named."""
    assert main(["health"]) == 2
    assert main(["health", "a.toml", "--db", "b.sqlite"]) == 2
    assert "name the record, once" in capfd.readouterr().err
