"""A live run and its replays give the same rows."""

from __future__ import annotations

import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest
from live_plate import PLATE, TABLES, assert_same, backlog, count, rows, wait_for

from platewatch import compose
from platewatch.cli import main
from platewatch.clock import ScaledClock
from platewatch.daemon import run_daemon
from platewatch.daemon_words import open_log

pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")

SPEED = 25.0
BEGIN_S, END_S = 5340.0, 5700.0


@pytest.fixture(scope="module")
def live(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Six minutes of a zone that stays on, watched live at 25 times the speed.

    The first alarm is acknowledged while the plate runs.
    """
    record = tmp_path_factory.mktemp("live") / "live.sqlite"
    stop = threading.Event()
    with compose.EmbeddedBroker() as broker:
        clock = ScaledClock(time.time_ns() // 1000, time.monotonic(), SPEED)
        shared = f"{clock.origin_us}:{clock.origin_monotonic!r}:{clock.speed!r}"
        description = compose.with_broker(compose.describe(PLATE), f"127.0.0.1:{broker.port}")
        daemon = threading.Thread(
            target=run_daemon,
            args=([description], clock, open_log(False), stop),
            kwargs={"database": str(record)},
        )
        daemon.start()
        simulator = subprocess.Popen(
            [
                *(sys.executable, "-m", "sim_sensors", "zone-stays-on", str(PLATE)),
                *("--publish", f"127.0.0.1:{broker.port}", "--clock", shared),
                *("--from", f"{BEGIN_S:g}", "--until", f"{END_S:g}"),
            ],
            stdout=subprocess.DEVNULL,
        )
        try:
            assert wait_for(lambda: record.exists() and count(record, "alarm_event"), 60)
            words = ["alarms", "ack", "peak-coming", "product", "--person", "late shift"]
            assert main([*words, "--db", str(record)]) == 0
            assert simulator.wait(60) == 0
            wait_for(lambda: count(record, "reading") >= (END_S - BEGIN_S) / 2 * 22, 10)
        finally:
            simulator.kill()
            simulator.wait()
            stop.set()
            daemon.join(20)
    assert not daemon.is_alive()
    return record


def test_the_live_run_lost_nothing_and_saw_the_alarm_acknowledged(live: Path) -> None:
    """180 samples of 22 channels; the acknowledgement became a change of state."""
    assert count(live, "reading") == 180 * 22
    assert count(live, "reading", "flags & 2") == 0
    assert count(live, "peak") >= 180
    assert count(live, "alarm_event", "to_state = 'acknowledged' AND person = 'late shift'") == 1


@pytest.fixture(scope="module")
def of_record(live: Path) -> Path:
    """The record replayed."""
    again = live.with_name("of-record.sqlite")
    assert main(["replay", str(PLATE), str(live), "--db", str(again)]) == 1
    return again


@pytest.fixture(scope="module")
def of_log(live: Path) -> Path:
    """The record exported as a wide log, and that replayed."""
    log, again = live.with_name("log.csv"), live.with_name("of-log.sqlite")
    assert main(["export", "readings", "--db", str(live), "--out", str(log)]) == 0
    assert main(["replay", str(PLATE), str(log), "--db", str(again)]) == 1
    return again


@pytest.mark.parametrize("table", TABLES)
def test_replay_of_the_record_gives_what_live_gave(live: Path, of_record: Path, table: str) -> None:
    """Design, section 6: equal to 1e-9, actions at the ticks that used them."""
    assert_same(rows(live, table), rows(of_record, table))


@pytest.mark.parametrize("table", ["peak", "zone_power", "alarm_limit_probability"])
def test_replay_of_the_exported_log_gives_what_live_gave(
    live: Path, of_log: Path, table: str
) -> None:
    """A log knows the readings alone; up to its last one every row is the same."""
    assert count(of_log, "peak") == 180
    replayed = rows(of_log, table)
    last_us = replayed[-1][0]
    assert isinstance(last_us, int)
    before = [row for row in rows(live, table) if isinstance(row[0], int) and row[0] <= last_us]
    assert_same(before, replayed)


def test_replay_of_the_exported_log_raises_the_same_alarms(live: Path, of_log: Path) -> None:
    """A log holds neither the acknowledgement nor what came as backlog, which raises no
    alarm live: compared are the alarms raised up to there, and up to the log's end."""
    ends = [int(str(rows(of_log, "peak")[-1][0]))]
    ends += backlog(live)
    raised = [
        [row for row in rows(record, "alarm_event") if row[5] == "unacknowledged"]
        for record in (live, of_log)
    ]
    until = [[row for row in found if int(str(row[0])) < min(ends)] for found in raised]
    assert until[0]
    assert_same(until[0], until[1])
