"""The bus against a real broker: nothing is lost, nothing is said outside our root."""

from __future__ import annotations

import queue
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from broker_process import HAVE_MOSQUITTO, Mosquitto, free_port, wait_for

from platewatch.adapters.bus import Arrival, Bus, BusEvent
from platewatch.adapters.messages import Routes
from platewatch.clock import SystemClock
from platewatch.errors import MessageError, SettingsError

pytestmark = [
    pytest.mark.broker,
    pytest.mark.skipif(not HAVE_MOSQUITTO, reason="needs mosquitto and its clients"),
]

ROUTES = Routes("p1", {"T1": "degC"}, {"Z1": 1.0})


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Mosquitto]:
    mosquitto = Mosquitto(tmp_path).start()
    yield mosquitto
    mosquitto.stop()


class Watch:
    """A bus with its queue, started; stopped at the end of the test."""

    def __init__(self, port: int, size: int = 1000, **more: object) -> None:
        self.sink: queue.Queue[Arrival] = queue.Queue(size)
        options = {"port": port, "publish": True, **more}
        self.bus = Bus("p1", ROUTES.topics, self.sink, SystemClock(), **options)  # type: ignore[arg-type]
        self.events: list[BusEvent] = []
        self.bus.start()

    def __enter__(self) -> Watch:
        return self

    def __exit__(self, *error: object) -> None:
        self.bus.stop()

    def connected(self) -> bool:
        return wait_for(lambda: self.bus.connected)

    def told(self, what: str) -> bool:
        while not self.bus.events.empty():
            self.events.append(self.bus.events.get())
        return any(event.what == what for event in self.events)

    def take(self, count: int) -> list[Arrival]:
        return [self.sink.get(timeout=8) for _ in range(count)]


def subscribed(watch: Watch, broker: Mosquitto) -> None:
    """Wait until messages come through."""
    assert watch.connected()
    for _ in range(100):
        broker.publish("plates/p1/surround/probe", "0")
        try:
            watch.bus.acknowledge([watch.sink.get(timeout=0.2).token])
        except queue.Empty:
            continue
        break
    while True:
        try:
            watch.bus.acknowledge([watch.sink.get(timeout=0.3).token])
        except queue.Empty:
            return


def test_a_number_from_the_plant_arrives_in_the_queue(broker: Mosquitto) -> None:
    """mosquitto_pub of a bare number: topic, bytes and arrival time, at QoS 1."""
    with Watch(broker.port) as watch:
        subscribed(watch, broker)
        broker.publish("plates/p1/sensor/T1", "121.3")
        (arrival,) = watch.take(1)
        assert (arrival.topic, arrival.payload, arrival.token.qos) == (
            "plates/p1/sensor/T1",
            b"121.3",
            1,
        )
        (reading,) = ROUTES.decode(arrival.topic, arrival.payload, arrival.seen_us).readings
        assert (reading.channel, reading.value) == ("sensor/T1", 121.3)
        assert abs(arrival.seen_us - time.time() * 1e6) < 5e6
        assert watch.bus.silence_s() < 5


def test_a_retained_value_says_so(broker: Mosquitto) -> None:
    """What the broker kept from before is last known, not live."""
    broker.publish("plates/p1/sensor/T1", "99", "-r")
    with Watch(broker.port) as watch:
        (arrival,) = watch.take(1)
        assert arrival.retain


def test_what_was_not_acknowledged_comes_again_after_a_restart(broker: Mosquitto) -> None:
    """Acknowledgement after the commit: a daemon killed before it loses nothing."""
    with Watch(broker.port) as first:
        subscribed(first, broker)
        for n in range(6):
            broker.publish("plates/p1/sensor/T1", str(n))
        arrivals = first.take(6)
        assert first.bus.acknowledge(a.token for a in arrivals[:2]) == 2
        broker.publish("plates/p1/sensor/T1", "6")
        first.take(1)
    with Watch(broker.port) as second:
        again = second.take(5)
        assert [a.payload for a in again] == [b"2", b"3", b"4", b"5", b"6"]
        assert all(a.dup for a in again)


def test_a_kill_before_the_acknowledgement_loses_nothing(broker: Mosquitto, tmp_path: Path) -> None:
    """SIGKILL of the receiving process: every message comes again, and the last will is
    on platewatch/p1/alive, retained."""
    script = tmp_path / "receiver.py"
    script.write_text(
        "import queue, sys\n"
        "from platewatch.adapters.bus import Bus\n"
        "from platewatch.clock import SystemClock\n"
        "sink = queue.Queue(100)\n"
        "bus = Bus('p1', ['plates/p1/#'], sink, SystemClock(), port=int(sys.argv[1]),\n"
        '          publish=True, will=b\'{"state":"lost"}\')\n'
        "bus.start()\n"
        "while True:\n"
        "    print(sink.get().payload.decode(), flush=True)\n"
        '    bus.alive(b\'{"state":"alive"}\')\n'
    )
    process = subprocess.Popen(
        [sys.executable, str(script), str(broker.port)], stdout=subprocess.PIPE, text=True
    )
    assert process.stdout is not None
    try:
        broker.publish("plates/p1/sensor/T1", "early", "-r")
        assert process.stdout.readline().strip() == "early", "connected and subscribed"
        for n in range(5):
            broker.publish("plates/p1/sensor/T1", str(n))
            assert process.stdout.readline().strip() == str(n)
    finally:
        process.send_signal(signal.SIGKILL)
        process.wait(10)
        process.stdout.close()
    assert wait_for(
        lambda: broker.listen("platewatch/p1/alive", 1) == ['platewatch/p1/alive {"state":"lost"}']
    )
    with Watch(broker.port) as watch:
        again = [a.payload for a in watch.take(7) if not a.retain]
        assert again == [b"0", b"1", b"2", b"3", b"4"]


def test_an_orderly_stop_says_stopped_and_not_lost(broker: Mosquitto) -> None:
    """A last will is not sent on a clean disconnect, so we say it ourselves."""
    with Watch(broker.port, will=b"lost") as watch:
        assert watch.connected()
        assert watch.bus.alive(b"alive")
        assert not watch.bus.alive(b"alive"), "at most every 5 s"
    assert broker.listen("platewatch/p1/alive", 1) == ["platewatch/p1/alive stopped"]


def test_a_token_of_an_earlier_connection_acknowledges_nothing(tmp_path: Path) -> None:
    """Message numbers are given anew after a reconnect: an old token could acknowledge
    a message that was never stored."""
    broker = Mosquitto(tmp_path).start()
    try:
        with Watch(broker.port) as watch:
            subscribed(watch, broker)
            broker.publish("plates/p1/sensor/T1", "1")
            (old,) = watch.take(1)
            broker.stop()
            assert wait_for(lambda: not watch.bus.connected)
            assert watch.bus.acknowledge([old.token]) == 0
            broker.start()
            assert watch.connected()
            (again,) = watch.take(1)
            assert again.payload == b"1"
            assert watch.bus.acknowledge([old.token]) == 0
            assert watch.bus.acknowledge([again.token]) == 1
            assert watch.told("lost")
    finally:
        broker.stop()


def test_it_starts_without_a_broker_and_keeps_trying(tmp_path: Path) -> None:
    """Cold start: the PC is on, the broker not yet; the trouble is told once."""
    broker = Mosquitto(tmp_path)
    with Watch(broker.port) as watch:
        assert wait_for(lambda: watch.told("no broker"))
        assert not watch.bus.alive()
        broker.start()
        try:
            assert watch.connected()
            assert watch.told("connected")
            assert [e.what for e in watch.events].count("no broker") == 1
        finally:
            broker.stop()


def test_a_full_queue_is_told_and_the_network_thread_lives(broker: Mosquitto) -> None:
    """The callback never blocks and never raises; what was not taken is not acknowledged."""
    with Watch(broker.port, size=1) as watch:
        assert watch.connected()
        for n in range(4):
            broker.publish("plates/p1/sensor/T1", str(n))
        assert wait_for(lambda: watch.bus.dropped >= 2)
        assert watch.told("queue full")
        assert watch.bus.thread_alive


def test_an_exception_in_a_callback_does_not_end_the_network_thread(broker: Mosquitto) -> None:
    """paho's network thread dies of it while it still says connected; ours must not."""

    class Broken(SystemClock):
        def utc_us(self) -> int:
            if armed:
                raise RuntimeError("clock gone")
            return super().utc_us()

    armed: list[int] = []
    sink: queue.Queue[Arrival] = queue.Queue(10)
    bus = Bus("p1", ["plates/p1/#"], sink, Broken(), port=broker.port)
    bus.start()
    try:
        assert wait_for(lambda: bus.connected)
        time.sleep(0.3)
        armed.append(1)
        broker.publish("plates/p1/sensor/T1", "1")
        assert wait_for(lambda: bus.received == 1)
        armed.clear()
        broker.publish("plates/p1/sensor/T1", "2")
        assert sink.get(timeout=8).payload == b"2"
        assert bus.thread_alive
    finally:
        bus.stop()


@pytest.mark.filterwarnings("ignore::pytest.PytestUnhandledThreadExceptionWarning")  # the aim
def test_a_dead_network_thread_is_noticed_and_replaced(broker: Mosquitto) -> None:
    """Never trust "connected": the daemon's watch looks at the thread itself."""

    class Deadly(SystemClock):
        def monotonic(self) -> float:
            if armed:
                armed.clear()
                raise SystemExit  # passes every "except Exception" and ends a thread
            return super().monotonic()

    armed: list[int] = []
    sink: queue.Queue[Arrival] = queue.Queue(10)
    bus = Bus("p1", ["plates/p1/#"], sink, Deadly(), port=broker.port)
    bus.start()
    try:
        assert wait_for(lambda: bus.connected)
        time.sleep(0.3)
        armed.append(1)
        broker.publish("plates/p1/sensor/T1", "1")
        assert wait_for(lambda: not bus.thread_alive)
        assert bus.connected, "which is the trap"
        bus.watch()
        assert sink.get(timeout=8).payload == b"1", "not acknowledged, so it came again"
        assert bus.thread_alive
    finally:
        bus.stop()


def test_a_second_daemon_of_the_same_name_is_a_loud_error(broker: Mosquitto) -> None:
    """Two clients of one name throw each other out for ever; both are told why."""
    with Watch(broker.port, longest_wait_s=1) as first, Watch(broker.port, longest_wait_s=1):
        assert wait_for(lambda: first.told("taken over"), 20)


def test_a_forgetful_broker_is_reported(tmp_path: Path) -> None:
    """A broker that keeps no sessions loses what comes while we are away."""
    broker = Mosquitto(tmp_path).start()
    try:
        with Watch(broker.port) as watch:
            subscribed(watch, broker)
            broker.stop()
            (tmp_path / "mosquitto.db").unlink(missing_ok=True)
            broker.start()
            assert wait_for(lambda: watch.told("session forgotten"))
            broker.publish("plates/p1/sensor/T1", "7")
            assert watch.take(1)[0].payload == b"7", "subscribed anew"
    finally:
        broker.stop()


def test_a_subscription_without_redelivery_is_reported(tmp_path: Path) -> None:
    """A broker that grants QoS 0 only would lose data in silence: read from the SUBACK."""
    broker = Mosquitto(tmp_path, "max_qos 0\n").start()
    try:
        with Watch(broker.port, publish=False) as watch:
            assert wait_for(lambda: watch.told("subscription refused"))
    finally:
        broker.stop()


def certificate(folder: Path, name: str) -> str:
    """A self-signed certificate for one address."""
    made = ["openssl", "req", "-x509", "-newkey", "rsa:2048", "-nodes", "-days", "2"]
    made += ["-subj", "/CN=bus", "-addext", f"subjectAltName={name}"]
    made += ["-keyout", str(folder / "key.pem"), "-out", str(folder / "cert.pem")]
    subprocess.run(made, check=True, capture_output=True)
    (folder / "key.pem").chmod(0o644)
    return f"certfile {folder / 'cert.pem'}\nkeyfile {folder / 'key.pem'}\n"


# paho leaves the socket of a failed handshake to the garbage collector.
@pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning")
@pytest.mark.skipif(shutil.which("openssl") is None, reason="needs openssl for a certificate")
@pytest.mark.parametrize(("name", "fits"), [("IP:127.0.0.1", True), ("DNS:elsewhere", False)])
def test_the_brokers_certificate_and_name_are_always_checked(
    tmp_path: Path, name: str, fits: bool
) -> None:
    """TLS with the plant's own CA; a certificate for another machine is not accepted."""
    broker = Mosquitto(tmp_path, certificate(tmp_path, name)).start()
    try:
        with Watch(broker.port, ca_file=str(tmp_path / "cert.pem")) as watch:
            told = "connected" if fits else "no broker"
            assert wait_for(lambda: watch.told(told))
            assert watch.bus.connected is fits
    finally:
        broker.stop()


def test_a_wrong_password_is_told_once(tmp_path: Path) -> None:
    """Refused by the broker: the reason is given, and not at every attempt again."""
    broker = Mosquitto(tmp_path, "allow_anonymous false\n").start()
    try:
        with Watch(broker.port, longest_wait_s=1) as watch:
            assert wait_for(lambda: watch.told("refused"))
            time.sleep(1.5)
            watch.told("")
            assert [e.what for e in watch.events].count("refused") == 1
            assert not watch.bus.connected
    finally:
        broker.stop()


def test_nothing_is_sent_outside_our_own_root(broker: Mosquitto) -> None:
    """platewatch switches nothing: a controller's topic cannot even be written by mistake."""
    with Watch(broker.port) as watch:
        for topic in ("plates/p1/zone/Z1/setpoint", "platewatch/p2/peak", "platewatch/p1/#"):
            with pytest.raises(MessageError, match="not below platewatch/p1/"):
                watch.bus.publish(topic, b"1")
        assert watch.connected()
        assert watch.bus.publish("platewatch/p1/peak", b"{}", retain=True, qos=1)
    assert broker.listen("platewatch/p1/peak", 1) == ["platewatch/p1/peak {}"]


def test_with_publishing_off_nothing_at_all_is_sent(broker: Mosquitto) -> None:
    """Read-only by default: no peak, no sign of life, no last will."""
    with Watch(broker.port, publish=False) as watch:
        assert watch.connected()
        assert not watch.bus.publish("platewatch/p1/peak", b"{}", retain=True)
        assert not watch.bus.alive()
    assert broker.listen("platewatch/#", 1, within_s=1) == []


def bus_with(**more: str) -> Bus:
    return Bus("p1", ["x"], queue.Queue(1), SystemClock(), port=free_port(), **more)  # type: ignore[arg-type]


def test_secrets_and_certificates_that_cannot_be_used_are_settings_mistakes(tmp_path: Path) -> None:
    """Strict rights, no empty file, no unencrypted password to another machine."""
    secret = tmp_path / "secret"
    secret.write_text("hidden word\n")
    secret.chmod(0o644)
    with pytest.raises(SettingsError, match="chmod 600") as caught:
        bus_with(user="pw", secret_file=str(secret))
    assert "hidden" not in str(caught.value)
    secret.chmod(0o600)
    assert bus_with(user="pw", secret_file=str(secret))
    with pytest.raises(SettingsError, match="unencrypted"):
        bus_with(user="pw", secret_file=str(secret), host="broker.example")
    secret.write_text("")
    with pytest.raises(SettingsError, match="is empty"):
        bus_with(user="pw", secret_file=str(secret))
    with pytest.raises(SettingsError, match="cannot be read"):
        bus_with(user="pw", secret_file=str(tmp_path / "none"))
    with pytest.raises(SettingsError, match="ca_file"):
        bus_with(ca_file=str(tmp_path / "none"))
