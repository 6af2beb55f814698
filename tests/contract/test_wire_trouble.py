"""A connection that looks well and is not: sessions not kept, silence, a queue that ran over."""

from __future__ import annotations

import queue
import socket
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from broker_process import HAVE_MOSQUITTO, HOST, Mosquitto, wait_for

from platewatch.adapters import bus as bus_module
from platewatch.adapters.bus import Arrival, Bus
from platewatch.adapters.bus_selftest import Account, session_is_kept
from platewatch.clock import SystemClock

needs_mosquitto = pytest.mark.skipif(not HAVE_MOSQUITTO, reason="needs mosquitto and its clients")
CONNACK, SUBACK = bytes([0x20, 2, 0, 0]), 0x90


class Forgetful:
    """A broker that lets everyone in and never has a session (MQTT 3.1.1, chapter 3)."""

    def __init__(self) -> None:
        self._listener = socket.create_server((HOST, 0))
        self.port = int(self._listener.getsockname()[1])
        self._thread = threading.Thread(target=self._serve)
        self._thread.start()

    def close(self) -> None:
        self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self._thread.join(10)

    def _serve(self) -> None:
        while True:
            try:
                line, _ = self._listener.accept()
            except OSError:
                return
            with line:
                self._talk(line)

    def _talk(self, line: socket.socket) -> None:
        while packet := line.recv(4096):
            kind = packet[0] & 0xF0
            if kind == 0x10:
                line.sendall(CONNACK)
            elif kind == 0x80:
                line.sendall(bytes([SUBACK, 3, packet[2], packet[3], 1]))
            elif kind == 0xE0:
                return


@pytest.fixture
def forgetful() -> Iterator[Forgetful]:
    made = Forgetful()
    yield made
    made.close()


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Mosquitto]:
    made = Mosquitto(tmp_path).start()
    yield made
    made.stop()


def at(port: int) -> Account:
    return Account(HOST, port, None, "", None)


def told(bus: Bus, found: list[str]) -> list[str]:
    while not bus.events.empty():
        found.append(bus.events.get().what)
    return found


def test_a_broker_that_keeps_no_sessions_is_found_at_once(forgetful: Forgetful) -> None:
    """Connect, subscribe, disconnect, connect again: no session there."""
    assert session_is_kept(at(forgetful.port), "plates/p1/#") is False


def test_a_broker_that_is_not_there_says_nothing_about_sessions() -> None:
    """Unknown is not a finding."""
    with socket.create_server((HOST, 0)) as taken:
        port = int(taken.getsockname()[1])
    assert session_is_kept(at(port), "plates/p1/#", wait_s=1.0) is None


@pytest.mark.broker
@needs_mosquitto
def test_a_broker_that_keeps_sessions_passes_and_none_of_the_test_is_left(
    broker: Mosquitto, tmp_path: Path
) -> None:
    """The throw-away client takes its session away again."""
    assert session_is_kept(at(broker.port), "plates/p1/#") is True
    broker.stop()  # which writes the sessions that are left
    assert b"pw-test-" not in (tmp_path / "mosquitto.db").read_bytes()


def test_the_test_of_sessions_runs_by_itself_after_connecting(forgetful: Forgetful) -> None:
    """One warning that names the remedy."""
    bus = Bus("p1", ["plates/p1/#"], queue.Queue(9), SystemClock(), port=forgetful.port)
    bus._account = at(forgetful.port)
    bus._test_session()
    event = bus.events.get(timeout=5)
    assert event.what == "sessions not kept"
    assert "mosquitto-platewatch.conf" in event.text


@pytest.mark.broker
@needs_mosquitto
def test_messages_that_found_the_queue_full_come_again(broker: Mosquitto) -> None:
    """A queue that ran over owes nothing in the end: the connection is made anew."""
    sink: queue.Queue[Arrival] = queue.Queue(4)
    bus = Bus("p1", ["plates/p1/#"], sink, SystemClock(), port=broker.port)
    bus.start()
    got: list[bytes] = []
    try:
        assert wait_for(lambda: bus.connected)
        time.sleep(0.3)
        for n in range(10):
            broker.publish("plates/p1/sensor/T1", str(n))
        assert wait_for(lambda: bus.dropped == 6)

        def take_all() -> bool:
            bus.watch()
            while not sink.empty():
                arrival = sink.get()
                got.append(arrival.payload)
                bus.acknowledge([arrival.token])
            return len(set(got)) == 10

        assert wait_for(take_all, 20)
        assert "renewed" in told(bus, [])
        assert "lost" not in told(bus, [])
    finally:
        bus.stop()


@pytest.mark.broker
@needs_mosquitto
def test_a_connection_that_brings_nothing_is_told_once_and_made_anew(
    broker: Mosquitto, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The age of the last message is watched, not the word "connected"."""
    monkeypatch.setattr(bus_module, "SILENT_AFTER_S", 0.5)
    monkeypatch.setattr(bus_module, "RENEW_AFTER_S", 1.0)
    bus = Bus("p1", ["plates/p1/#"], queue.Queue(9), SystemClock(), port=broker.port)
    bus.start()
    found: list[str] = []
    try:

        def renewed() -> bool:
            bus.watch()
            told(bus, found)
            return found.count("renewed") >= 1 and found.count("connected") >= 2

        assert wait_for(renewed, 15)
        assert found.count("silent") == 1
        assert "lost" not in found
        assert wait_for(lambda: bus.turned_s() < 2.0)
    finally:
        bus.stop()


@pytest.mark.broker
@needs_mosquitto
def test_the_recommended_rights_let_platewatch_write_below_its_own_root_only(
    tmp_path: Path,
) -> None:
    """Job, M14: the default rights cannot publish a duty or a set-point."""
    rights = Path(__file__).resolve().parents[2] / "config" / "mosquitto-platewatch.acl"
    broker = Mosquitto(tmp_path, f"acl_file {rights}\n").start()
    sink: queue.Queue[Arrival] = queue.Queue(9)
    bus = Bus(
        "table-1",
        ["plates/table-1/#"],
        sink,
        SystemClock(),
        port=broker.port,
        user="platewatch",
        publish=True,
    )
    bus.start()
    try:
        assert wait_for(lambda: bus.connected)
        time.sleep(0.3)
        duty = "plates/table-1/zone/Z1/duty"
        broker.publish(duty, "0.9", "-u", "platewatch")
        broker.publish(duty, "0.8", "-u", "screen")
        broker.publish(duty, "0.4", "-u", "gateway-table-1")
        assert sink.get(timeout=8).payload == b"0.4"
        assert sink.empty()
        assert bus.publish("platewatch/table-1/peak", b"{}", retain=True, qos=1)
        assert broker.listen("platewatch/# -u screen", 1) == ["platewatch/table-1/peak {}"]
        assert not [what for what in told(bus, []) if what not in ("connected",)]
    finally:
        bus.stop()
        broker.stop()
