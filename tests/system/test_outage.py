"""A broker that goes away, and the backlog that comes after it."""

from __future__ import annotations

import json
import queue
import threading
import time
from pathlib import Path

import pytest
from live_plate import DUTIES, PLATE, SENSORS, TABLES, assert_same, count, rows, wait_for
from paho.mqtt.client import Client, MQTTMessage
from paho.mqtt.enums import CallbackAPIVersion

from platewatch import compose
from platewatch.cli import main
from platewatch.clock import ScaledClock
from platewatch.daemon import run_daemon
from platewatch.daemon_words import open_log
from platewatch.units import iso

pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")

SPEED = 10.0
SAMPLE_US = 2_000_000


class Sampler:
    """Samples every 2 s of plate time; keeps what it cannot send, sends it later, in order."""

    def __init__(self, clock: ScaledClock, port: int) -> None:
        self._clock, self._port = clock, port
        self._waiting: queue.SimpleQueue[str] = queue.SimpleQueue()
        self._client: Client | None = None
        self._next_us = clock.utc_us() // SAMPLE_US * SAMPLE_US
        self.samples = 0

    def connect(self) -> None:
        self._client = Client(CallbackAPIVersion.VERSION2, client_id="gateway")
        self._client.connect("127.0.0.1", self._port)
        self._client.loop_start()

    def disconnect(self) -> None:
        assert self._client is not None
        self._client.disconnect()
        self._client.loop_stop()
        self._client = None

    def run(self, plate_s: float) -> None:
        end_us = self._clock.utc_us() + round(plate_s * 1e6)
        while self._clock.utc_us() < end_us:
            if self._clock.utc_us() >= self._next_us:
                self._sample()
            while self._client is not None and not self._waiting.empty():
                body = self._waiting.get()
                self._client.publish("plates/table-1/readings", body, qos=1).wait_for_publish(10)
            time.sleep(0.01)

    def _sample(self) -> None:
        values = dict.fromkeys(SENSORS, 120.0 + 0.1 * (self.samples % 3))
        values |= dict.fromkeys(DUTIES, 0.25)
        self._waiting.put(json.dumps({"at": iso(self._next_us), **values}))
        self._next_us += SAMPLE_US
        self.samples += 1


@pytest.fixture(scope="module")
def outage(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, int]:
    """One minute live, one without the broker, one and a half after it; and the samples sent."""
    record = tmp_path_factory.mktemp("outage") / "r.sqlite"
    stop = threading.Event()
    clock = ScaledClock(time.time_ns() // 1000, time.monotonic(), SPEED)
    broker = compose.EmbeddedBroker().start()
    description = compose.with_broker(compose.describe(PLATE), f"127.0.0.1:{broker.port}")
    daemon = threading.Thread(
        target=run_daemon,
        args=([description], clock, open_log(False), stop),
        kwargs={"database": str(record)},
    )
    daemon.start()
    try:
        assert wait_for(lambda: count(record, "run") if record.exists() else 0, 20)
        sampler = Sampler(clock, broker.port)
        sampler.connect()
        sampler.run(60)
        sampler.disconnect()
        broker.stop()
        sampler.run(60)
        broker = compose.EmbeddedBroker(broker.port).start()
        assert wait_for(lambda: _subscribed(broker.port), 30)
        sampler.connect()
        sampler.run(90)
        sampler.disconnect()
        wait_for(lambda: count(record, "reading") == sampler.samples * 15, 10)
    finally:
        stop.set()
        daemon.join(20)
        broker.stop()
    return record, sampler.samples


def _subscribed(port: int) -> bool:
    """Does the daemon's retained word say that it is connected again?"""
    heard: queue.SimpleQueue[bytes] = queue.SimpleQueue()
    client = Client(CallbackAPIVersion.VERSION2, client_id="looker")

    def take(_client: Client, _userdata: object, message: MQTTMessage) -> None:
        heard.put(message.payload)

    client.on_message = take
    client.connect("127.0.0.1", port)
    client.subscribe("platewatch/table-1/alive")
    client.loop_start()
    try:
        return wait_for(lambda: not heard.empty() and b'"alive"' in heard.get(), 1.0)
    finally:
        client.disconnect()
        client.loop_stop()


def test_no_reading_is_lost_in_an_outage(outage: tuple[Path, int]) -> None:
    """Every sample is stored once; those of the outage are marked as backlog or late."""
    record, samples = outage
    assert count(record, "reading") == samples * 15
    marked = count(record, "reading", "flags IN (1, 4)")
    assert marked >= 15 * 15  # of about 30 samples in a minute, those older than 15 s


def test_an_outage_is_one_alarm_and_no_more(outage: tuple[Path, int]) -> None:
    """Job, batch 6: exactly one picture-blind, no process alarm, over again by itself."""
    record, _ = outage
    raised = [row for row in rows(record, "alarm_event") if row[5] == "unacknowledged"]
    assert [row[1] for row in raised] == ["picture-blind"]
    assert rows(record, "alarm_event")[-1][5] == "returned_unacknowledged"


def test_most_of_the_backlog_reaches_the_estimator(outage: tuple[Path, int]) -> None:
    """Only the seconds that were needed to find the picture blind are late and unused."""
    record, samples = outage
    late = count(record, "reading", "flags & 1")
    assert late <= 12 * 15  # 10 s until blind, 2 s for stragglers, and the ticks under way
    assert count(record, "peak") >= samples - 2


def test_a_replay_of_an_outage_gives_what_live_gave(outage: tuple[Path, int]) -> None:
    """Design, section 6: flags are obeyed, nothing is decided again."""
    record, _ = outage
    again = record.with_name("again.sqlite")
    assert main(["replay", str(PLATE), str(record), "--db", str(again)]) == 1
    for table in TABLES:
        assert_same(rows(record, table), rows(again, table))
