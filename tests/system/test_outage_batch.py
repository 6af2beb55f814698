"""The outage batch: six minutes without the broker, a backlog with repeats, a clock set back."""

from __future__ import annotations

import csv
import io
import itertools
import json
import logging
import sqlite3
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pytest
from live_plate import PLATE, TABLES, assert_same, count, rows, wait_for
from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion

from platewatch import compose
from platewatch.cli import main
from platewatch.daemon import run_daemon
from platewatch.daemon_words import PlainLines
from platewatch.types import FILLED
from platewatch.units import from_iso

pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")
pytestmark = pytest.mark.timeout(120)

START = "2026-05-04T06:00:00Z"
BEGIN_S, OFF_S, BACK_S, STEP_S, END_S = 5700, 6000, 6360, 6370, 6640
SAMPLE_S = 2
FAST, FASTER, SLOW = 30.0, 60.0, 0.5


class PlantClock:
    """Plate time whose pace the test sets, and a UTC that it can set back."""

    def __init__(self, origin_us: int) -> None:
        self._lock = threading.Lock()
        self._at_s, self._real_s, self._speed = 0.0, time.monotonic(), SLOW
        self._origin_us, self.set_back_us = origin_us, 0

    def monotonic(self) -> float:
        with self._lock:
            return self._at_s + (time.monotonic() - self._real_s) * self._speed

    def utc_us(self) -> int:
        return self.true_us() - self.set_back_us

    def true_us(self) -> int:
        return self._origin_us + round(self.monotonic() * 1e6)

    def pace(self, speed: float) -> None:
        at_s = self.monotonic()
        with self._lock:
            self._at_s, self._real_s, self._speed = at_s, time.monotonic(), speed

    def wait_until(self, at_us: int) -> None:
        while self.true_us() < at_us:
            time.sleep(0.002)


def samples(log: Path) -> list[tuple[int, str]]:
    """Source time and message of every sample of a wide log."""
    found = []
    with log.open(newline="") as file:
        for row in csv.DictReader(file):
            at = row.pop("at")
            row.pop("batch", None)
            body = {"at": at, **{name: float(text) for name, text in row.items() if text}}
            found.append((from_iso(at), json.dumps(body)))
    return found


def gateway(port: int) -> Client:
    client = Client(CallbackAPIVersion.VERSION2, client_id="gateway")
    client.max_queued_messages_set(0)
    client.connect("127.0.0.1", port)
    client.loop_start()
    return client


class Batch:
    """The record of the outage, that of the same batch without it, and what was said."""

    def __init__(self, folder: Path) -> None:
        self.record, self.calm = folder / "outage.sqlite", folder / "calm.sqlite"
        log = folder / "clean.csv"
        command = [sys.executable, "-m", "sim_sensors", "clean", str(PLATE), "--log", str(log)]
        command += ["--from", str(BEGIN_S), "--until", str(END_S), "--start", START]
        subprocess.run(command, check=True, capture_output=True)
        assert main(["replay", str(PLATE), str(log), "--db", str(self.calm)]) == 0
        self.samples = samples(log)
        self.first_us = self.samples[0][0]
        self.spoken = io.StringIO()
        self._live()

    def at_us(self, batch_s: float) -> int:
        return self.first_us + round((batch_s - BEGIN_S - SAMPLE_S) * 1e6)

    def said(self, text: str, times: int = 1) -> bool:
        return wait_for(lambda: self.spoken.getvalue().count(text) >= times, 30)

    def _live(self) -> None:
        clock = PlantClock(self.first_us - 4_000_000)
        stop = threading.Event()
        handler = logging.StreamHandler(self.spoken)
        handler.setFormatter(PlainLines())
        voice = logging.Logger("outage", logging.INFO)
        voice.addHandler(handler)
        broker = compose.EmbeddedBroker().start()
        description = compose.with_broker(compose.describe(PLATE), f"127.0.0.1:{broker.port}")
        daemon = threading.Thread(
            target=run_daemon,
            args=([description], clock, voice, stop),
            kwargs={"database": str(self.record)},
        )
        daemon.start()
        try:
            assert self.said("connected:")
            time.sleep(0.3)
            line = gateway(broker.port)
            clock.pace(FAST)
            before = [s for s in self.samples if s[0] <= self.at_us(OFF_S)]
            self._send(line, clock, before)
            line.disconnect()
            line.loop_stop()
            broker.stop()
            clock.pace(FASTER)
            clock.wait_until(self.at_us(BACK_S))
            clock.pace(SLOW)  # for as long as the connection takes
            broker = compose.EmbeddedBroker(broker.port).start()
            assert self.said("connected:", 2)
            time.sleep(0.3)
            line = gateway(broker.port)
            held = [s for s in self.samples if self.at_us(OFF_S) < s[0] <= self.at_us(BACK_S)]
            for number, (_, body) in enumerate(held, 1):
                for _ in range(2 if number % 10 == 0 else 1):
                    line.publish("plates/table-1/readings", body, qos=1).wait_for_publish(10)
            clock.pace(FAST)
            after = [s for s in self.samples if s[0] > self.at_us(BACK_S)]
            step_us = self.at_us(STEP_S)
            self._send(line, clock, [s for s in after if s[0] <= step_us])
            clock.set_back_us = 90_000_000
            self._send(line, clock, [s for s in after if s[0] > step_us])
            channels = count(self.record, "channel")
            wait_for(lambda: count(self.record, "reading") >= len(self.samples) * channels, 20)
            line.disconnect()
            line.loop_stop()
        finally:
            stop.set()
            daemon.join(30)
            broker.stop()
        assert len(held) == 180

    def _send(self, line: Client, clock: PlantClock, these: list[tuple[int, str]]) -> None:
        last = None
        for at_us, body in these:
            clock.wait_until(at_us)
            last = line.publish("plates/table-1/readings", body, qos=1)
        if last is not None:
            last.wait_for_publish(10)


@pytest.fixture(scope="module")
def batch(tmp_path_factory: pytest.TempPathFactory) -> Batch:
    return Batch(tmp_path_factory.mktemp("outage-batch"))


def test_exactly_one_alarm_and_it_says_blind_within_seconds(batch: Batch) -> None:
    """Job, M9 and batch 6: one picture-blind, no process alarm; blind within 10 s."""
    raised = [row for row in rows(batch.record, "alarm_event") if row[5] == "unacknowledged"]
    assert [row[1] for row in raised] == ["picture-blind"]
    after_s = (int(str(raised[0][0])) - batch.at_us(OFF_S)) / 1e6
    assert 10 <= after_s <= 12, "three sample times or 10 s, at the end of a tick of 2 s"


def test_the_one_gap_is_marked_as_filled_from_the_backlog(batch: Batch) -> None:
    """From the last reading before the outage to the last one of the backlog."""
    ((from_us, to_us, what),) = rows(batch.record, "gap")
    assert what == FILLED
    assert from_us == batch.at_us(OFF_S)
    # What arrives younger than 15 s counts as live again.
    assert batch.at_us(BACK_S) - 20_000_000 <= int(str(to_us)) <= batch.at_us(BACK_S) + 20_000_000


def test_every_sample_is_stored_once_and_the_repeats_are_counted(batch: Batch) -> None:
    """18 of the 180 stored samples come twice: dropped, counted, and no row is missing."""
    channels = count(batch.record, "channel")
    assert count(batch.record, "reading") == len(batch.samples) * channels
    connection = sqlite3.connect(batch.record)
    query = "SELECT count FROM refusal WHERE reason = 'duplicate'"
    assert connection.execute(query).fetchall() == [(18 * channels,)]
    connection.close()


def test_the_clock_that_was_set_back_is_one_note_and_nothing_else(batch: Batch) -> None:
    """Job, M12: a step of -90 s is one note, no process alarm, no lost order."""
    connection = sqlite3.connect(batch.record)
    notes = connection.execute("SELECT offset_us, what FROM clock_note").fetchall()
    connection.close()
    assert len(notes) == 1
    assert abs(notes[0][0] + 90_000_000) < 1_000_000
    assert notes[0][1] == "this computer's clock was set"
    assert count(batch.record, "reading", f"flags <> 0 AND at_us > {batch.at_us(STEP_S)}") == 0


def test_the_record_never_goes_back_in_time(batch: Batch) -> None:
    """Alarms in the order they were written, arrivals in that of the stamps, every tick there."""
    connection = sqlite3.connect(batch.record)
    times = [r[0] for r in connection.execute("SELECT at_us FROM alarm_event ORDER BY seq")]
    assert times == sorted(times)
    query = "SELECT at_us, min(seen_us), max(seen_us) FROM reading WHERE flags <> 1 GROUP BY at_us"
    arrivals = connection.execute(query + " ORDER BY at_us").fetchall()
    connection.close()
    assert all(a[2] <= b[1] for a, b in itertools.pairwise(arrivals))
    ticks = [int(str(row[0])) for row in rows(batch.record, "peak")]
    assert set(np.diff(ticks)) == {2_000_000}


def test_the_field_afterwards_is_that_of_the_batch_without_an_outage(batch: Batch) -> None:
    """Within 0.5 K at every place, from the end of the backlog to the end."""
    for batch_s in (BACK_S + 40, END_S - 20):
        fields = []
        for record in (batch.record, batch.calm):
            with compose.open_store(str(record), read_only=True) as store:
                fields.append(compose.field_at(store, "table-1", batch.at_us(batch_s)))
        assert float(np.abs(fields[0].degC - fields[1].degC).max()) <= 0.5


def test_every_line_of_the_outage_can_be_understood(batch: Batch) -> None:
    """What a person reads: lost, blind, connected, gap filled, clock set; and no flood."""
    print(batch.spoken.getvalue())
    lines = [line.split(": ", 1)[1] for line in batch.spoken.getvalue().splitlines()]
    assert len(lines) <= 20, lines
    for word in ("lost:", "ALARM HIGH picture-blind", "connected:", "filled from backlog"):
        assert any(word in line for line in lines), (word, lines)
    assert any("this computer's clock was set by -90 s" in line for line in lines)
    assert not any("Traceback" in line for line in lines)


def test_a_replay_of_the_outage_gives_what_live_gave(batch: Batch) -> None:
    """Design, section 6: flags are obeyed, nothing is decided again."""
    again = batch.record.with_name("again.sqlite")
    assert main(["replay", str(PLATE), str(batch.record), "--db", str(again)]) == 1
    for table in TABLES:
        assert_same(rows(batch.record, table), rows(again, table))
