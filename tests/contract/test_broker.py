"""The embedded broker of the demonstration."""

from __future__ import annotations

import queue
import socket
import sys
import time

import pytest
from broker_process import wait_for

from platewatch.adapters.broker import HOST, EmbeddedBroker, free_port
from platewatch.adapters.bus import Arrival, Bus
from platewatch.clock import SystemClock
from platewatch.errors import SettingsError

pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")


def bus_on(broker: EmbeddedBroker, sink: queue.Queue[Arrival], **more: object) -> Bus:
    return Bus("p1", ["plates/p1/#"], sink, SystemClock(), port=broker.port, **more)  # type: ignore[arg-type]


def sent(broker: EmbeddedBroker, count: int) -> None:
    """Publish as the simulated plate does, with paho at QoS 1."""
    from paho.mqtt.client import Client
    from paho.mqtt.enums import CallbackAPIVersion

    client = Client(CallbackAPIVersion.VERSION2, client_id="plate")
    client.connect(HOST, broker.port)
    client.loop_start()
    for n in range(count):
        client.publish("plates/p1/sensor/T1", str(n), qos=1).wait_for_publish(5)
    client.disconnect()
    client.loop_stop()


def test_what_is_sent_comes_back_through_the_embedded_broker() -> None:
    """The demonstration needs no installed broker: start, send, receive, stop."""
    sink: queue.Queue[Arrival] = queue.Queue(100)
    with EmbeddedBroker() as broker:
        bus = bus_on(broker, sink)
        bus.start()
        try:
            assert wait_for(lambda: bus.connected)
            time.sleep(0.3)
            sent(broker, 5)
            assert [sink.get(timeout=8).payload for _ in range(5)] == [b"0", b"1", b"2", b"3", b"4"]
        finally:
            bus.stop()


def test_it_keeps_what_was_not_acknowledged() -> None:
    """The daemon of the demonstration can be killed and loses nothing either."""
    sink: queue.Queue[Arrival] = queue.Queue(100)
    with EmbeddedBroker() as broker:
        for seen in (False, True):
            bus = bus_on(broker, sink)
            bus.start()
            try:
                assert wait_for(lambda bus=bus: bus.connected)  # type: ignore[misc]
                time.sleep(0.3)
                if not seen:
                    sent(broker, 3)
                again = [sink.get(timeout=8) for _ in range(3)]
                assert [arrival.payload for arrival in again] == [b"0", b"1", b"2"]
            finally:
                bus.stop()


def test_it_listens_on_this_machine_only_and_frees_its_port() -> None:
    """127.0.0.1, and nothing is left behind after the stop."""
    broker = EmbeddedBroker().start()
    try:
        assert broker.running
        addresses = {info[4][0] for info in socket.getaddrinfo(socket.gethostname(), None)}
        for address in (str(a) for a in addresses if not str(a).startswith("127.") and a != "::1"):
            with pytest.raises(ConnectionRefusedError):
                socket.create_connection((address, broker.port), timeout=0.5).close()
    finally:
        broker.stop()
        broker.stop()
    assert not broker.running
    with socket.socket() as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        probe.bind((HOST, broker.port))


def test_a_port_in_use_is_one_clear_line() -> None:
    """Says which port and what to do."""
    with socket.socket() as other:
        other.bind((HOST, 0))
        other.listen()
        port = other.getsockname()[1]
        with pytest.raises(SettingsError, match=rf"port {port} of 127.0.0.1 is in use"):
            EmbeddedBroker(port).start()


def test_an_impossible_port_is_refused() -> None:
    with pytest.raises(SettingsError, match="70000 is no port"):
        EmbeddedBroker(70_000)


def test_without_the_extra_it_names_what_to_install(monkeypatch: pytest.MonkeyPatch) -> None:
    """`demo` on a plain installation: the extra is named, no traceback."""
    monkeypatch.setitem(sys.modules, "iotcore", None)
    with pytest.raises(SettingsError, match=r"pip install 'platewatch\[demo\]'"):
        EmbeddedBroker(free_port()).start()
