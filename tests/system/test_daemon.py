"""The daemon as a process: starts, stops, kills, a broker that is not there."""

from __future__ import annotations

import json
import shutil
import sqlite3
import subprocess
import time
from pathlib import Path

import pytest
from live_plate import PLATE, TABLES, Daemon, Gateway, assert_same, count, rows, wait_for
from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion

from platewatch import compose
from platewatch.adapters.broker import EmbeddedBroker, free_port
from platewatch.cli import main

pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")

CHANNELS = 15


def test_a_daemon_that_is_stopped_killed_and_started_loses_no_reading(tmp_path: Path) -> None:
    """Design, section 4: what is acknowledged is stored; a restart goes on from the record.

    And a replay of all three runs gives their rows.
    """
    record = tmp_path / "r.sqlite"
    with EmbeddedBroker() as broker:
        gateway = Gateway(broker.port)
        daemon = Daemon(broker.port, record)
        assert daemon.said("connected")
        gateway.send_for(5.0)
        assert daemon.said("first readings: 9 of 9 sensors, 6 of 6 duties")
        assert daemon.terminate() == 0
        assert "run 1 stopped" in daemon.log
        gateway.send_for(1.0)  # the broker keeps these

        daemon = Daemon(broker.port, record)
        assert daemon.said("connected")
        gateway.send_for(5.0)
        daemon.kill()
        gateway.send_for(1.0)

        daemon = Daemon(broker.port, record)
        assert daemon.said("from where the record ends")
        gateway.send_for(5.0)
        assert wait_for(lambda: count(record, "reading") == gateway.sent * CHANNELS, 10)
        assert daemon.terminate() == 0
        gateway.close()
    assert count(record, "run") == 3
    assert count(record, "peak") > 5
    assert "Traceback" not in daemon.log
    again = tmp_path / "again.sqlite"
    assert main(["replay", str(PLATE), str(record), "--db", str(again)]) in (0, 1)
    for table in TABLES:
        assert_same(rows(record, table), rows(again, table))


def test_a_daemon_starts_without_a_broker_and_finds_it_later(tmp_path: Path) -> None:
    """Job, chapter 7: the first connection is retried; one plain line, no flood."""
    port = free_port()
    daemon = Daemon(port, tmp_path / "r.sqlite")
    assert daemon.said("no broker")
    time.sleep(3)
    assert len(daemon.log.splitlines()) <= 3
    with EmbeddedBroker(port):
        assert daemon.said("connected", 40)
        assert daemon.terminate() == 0
    assert "Traceback" not in daemon.log


def test_a_second_daemon_on_the_same_record_is_turned_away(tmp_path: Path) -> None:
    """Design, section 4: a lock file beside the database; a loud, clear error."""
    port = free_port()
    first = Daemon(port, tmp_path / "r.sqlite")
    assert first.said("run 1 starts")
    second = Daemon(port, tmp_path / "r.sqlite")
    assert second.said("another daemon")
    assert second._process.wait(10) == 4
    assert first.terminate() == 0


def test_refused_readings_are_told_once_a_minute(tmp_path: Path) -> None:
    """A flood of the same mistake is one line with its reason, not one a message."""
    with EmbeddedBroker() as broker:
        gateway = Gateway(broker.port)
        daemon = Daemon(broker.port, tmp_path / "r.sqlite")
        assert daemon.said("connected")
        for _ in range(40):
            gateway.send(time.time_ns() // 1000, {"sensor/T77": 1.0})
        assert daemon.said("first readings")
        assert daemon.terminate() == 0
        gateway.close()
    told = [line for line in daemon.log.splitlines() if "refused" in line]
    assert len(told) == 1
    assert "did you mean sensor/T" in told[0]


def test_the_bus_hears_peak_alive_and_stopped(tmp_path: Path) -> None:
    """Design, section 4: every message carries `at` and `run`; an orderly stop says so."""
    heard: dict[str, list[dict[str, object]]] = {}
    with EmbeddedBroker() as broker:
        listener = Client(CallbackAPIVersion.VERSION2, client_id="listener")
        listener.on_message = lambda c, u, m: heard.setdefault(m.topic, []).append(
            json.loads(m.payload)
        )
        listener.connect("127.0.0.1", broker.port)
        listener.subscribe("platewatch/#", 1)
        listener.loop_start()
        gateway = Gateway(broker.port)
        daemon = Daemon(broker.port, tmp_path / "r.sqlite")
        assert daemon.said("connected")
        gateway.send_for(6.0)
        peak, alive = "platewatch/table-1/peak", "platewatch/table-1/alive"
        assert wait_for(lambda: peak in heard and alive in heard, 5)
        assert daemon.terminate() == 0
        assert wait_for(lambda: heard[alive][-1]["state"] == "stopped", 5)
        gateway.close()
        listener.disconnect()
        listener.loop_stop()
    assert heard[alive][0]["state"] == "alive"
    assert set(heard) == {peak, alive}
    assert heard[peak][0].keys() >= {"at", "run", "now", "ahead", "alarm_limit_degC", "p_over"}
    assert heard[peak][0]["inferred"] is True
    assert heard[peak][0]["run"] == 1


def test_a_record_that_is_locked_for_a_while_delays_and_loses_nothing(tmp_path: Path) -> None:
    """Nothing is acknowledged before it is stored; one line tells of the trouble."""
    record = tmp_path / "r.sqlite"
    with EmbeddedBroker() as broker:
        gateway = Gateway(broker.port)
        daemon = Daemon(broker.port, record)
        assert daemon.said("connected")
        gateway.send_for(2.0)
        other = sqlite3.connect(record, isolation_level=None)
        other.execute("BEGIN IMMEDIATE")
        gateway.send_for(2.0)
        assert daemon.said("record not written, nothing acknowledged", 15)
        other.execute("ROLLBACK")
        other.close()
        assert wait_for(lambda: count(record, "reading") == gateway.sent * CHANNELS, 15)
        assert daemon.terminate() == 0
        gateway.close()


def test_one_daemon_watches_two_plates(tmp_path: Path) -> None:
    """Design, section 10a: one process runs several, here into one record."""
    record = tmp_path / "r.sqlite"
    other = PLATE.with_name("preheater.toml")
    sensor = compose.describe(other).plate.sensors[0].name
    with EmbeddedBroker() as broker:
        gateway = Gateway(broker.port)
        daemon = Daemon(broker.port, record, str(other))
        assert wait_for(lambda: daemon.log.count("connected") == 2, 20)
        for _ in range(4):
            at_us = time.time_ns() // 1000
            gateway.send(at_us)
            gateway.send(at_us, {f"sensor/{sensor}": 25.0}, plate="preheater")
            time.sleep(0.2)
        assert wait_for(lambda: daemon.log.count("first readings") == 2, 20)
        assert daemon.terminate() == 0
        gateway.close()
    plates = "SELECT count(DISTINCT plate) FROM peak"
    connection = sqlite3.connect(record)
    assert connection.execute(plates).fetchone() == (2,)
    connection.close()


@pytest.mark.broker
@pytest.mark.skipif(not shutil.which("mosquitto"), reason="needs the mosquitto broker")
def test_what_mosquitto_kept_for_a_killed_daemon_is_taken_up(tmp_path: Path) -> None:
    """Debian's broker as it comes, 20 messages in flight: 200 that wait all reach the record."""
    record, port = tmp_path / "r.sqlite", free_port()
    broker = subprocess.Popen(["mosquitto", "-p", str(port)], stderr=subprocess.DEVNULL)
    try:
        daemon = Daemon(port, record)
        assert daemon.said("connected", 40)
        gateway = Gateway(port)
        gateway.send_for(2.0)
        daemon.kill()
        start_us = time.time_ns() // 1000
        for number in range(200):
            gateway.send(start_us + 1000 * number)
        daemon = Daemon(port, record)
        assert wait_for(lambda: count(record, "reading") == gateway.sent * CHANNELS, 30)
        assert daemon.terminate() == 0
        gateway.close()
    finally:
        broker.terminate()
        broker.wait()
