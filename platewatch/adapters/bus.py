"""The plant's MQTT broker (paho-mqtt): messages in without loss, our own root out.

What makes it lose nothing at QoS 1: a stable client name with a persistent session,
and an acknowledgement that the daemon gives only after its commit.  Until then the
broker keeps the message and sends it again after a break.

The broker limits how many messages may wait for their acknowledgement (mosquitto:
max_inflight_messages, 20 unless raised).  Commit when the queue runs empty, or raise it.
"""

from __future__ import annotations

import contextlib
import queue
import ssl
import threading
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any, NamedTuple

from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags, MQTTMessage, MQTTv311
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from platewatch.clock import Clock
from platewatch.errors import MessageError, SettingsError

ALIVE_EVERY_S = 5.0
SHORT_CONNECTION_S = 10.0  # ended sooner, it may be another client of our name
SHORT_IN_A_ROW = 3
LOCAL_HOSTS = ("127.0.0.1", "::1", "localhost")


class Token(NamedTuple):
    """What acknowledges one message; void after the connection it came on."""

    generation: int
    mid: int
    qos: int


class Arrival(NamedTuple):
    """One message exactly as received."""

    topic: str
    payload: bytes
    retain: bool
    dup: bool
    token: Token
    seen_us: int


class BusEvent(NamedTuple):
    """what: connected, no broker, refused, subscription refused, lost, taken over,
    session forgotten, queue full, callback failed, network thread restarted."""

    what: str
    text: str
    at_us: int


class Bus:
    """One connection for one plate.

    topics: what to subscribe to;  sink: bounded queue that receives `Arrival`s
    publish: off means that nothing at all is sent, no last will either
    will: what the broker says for us on platewatch/<plate>/alive (retained) when we
    are lost;  secret_file: holds the password alone, readable by its owner only

    `events` holds `BusEvent`s for the daemon to log.  Raises SettingsError for files
    that are missing or too open, and for a password that would travel unencrypted.
    """

    def __init__(
        self,
        plate: str,
        topics: Sequence[str],
        sink: queue.Queue[Arrival],
        clock: Clock,
        *,
        host: str = "127.0.0.1",
        port: int | None = None,
        client_name: str = "",
        user: str = "",
        secret_file: str = "",
        ca_file: str = "",
        publish: bool = False,
        will: bytes = b"lost",
        keepalive_s: int = 30,
        plain_password: bool = False,
        longest_wait_s: int = 30,
    ) -> None:
        self.host, self.port = host, port or (8883 if ca_file else 1883)
        self.client_name = client_name or f"platewatch-{plate}"
        self.events: queue.SimpleQueue[BusEvent] = queue.SimpleQueue()
        self.received = self.dropped = 0
        self._topics, self._sink, self._clock = tuple(topics), sink, clock
        self._publish, self._root = publish, f"platewatch/{plate}/"
        self._keepalive_s = keepalive_s
        self._generation = 0
        self._connected = False
        self._lock = threading.Lock()  # generation and acknowledgement go together
        self._thread: threading.Thread | None = None
        self._stopping = False
        self._last_trouble = ""
        self._connected_at = self._last_message = self._last_alive = float("-inf")
        self._short = 0
        self._ever_connected = False
        self._tls = tls_context(ca_file) if ca_file else None
        self._user, self._will, self._longest_wait_s = user, will, longest_wait_s
        self._password = self._secret(secret_file, plain_password) if user else None
        self._client = self._build()

    @property
    def connected(self) -> bool:
        return self._connected

    @property
    def thread_alive(self) -> bool:
        """Does the network thread run?  paho says connected even after it died."""
        return self._thread is not None and self._thread.is_alive()

    def silence_s(self) -> float:
        """Seconds since the last message; infinite before the first."""
        return self._clock.monotonic() - self._last_message

    def start(self) -> None:
        """Begin connecting; needs no broker and keeps trying."""
        self._client.connect_async(self.host, self.port, keepalive=self._keepalive_s)
        self._client.loop_start()

    def stop(self, last_word: bytes = b"stopped", wait_s: float = 2.0) -> None:
        """Say that we stopped, disconnect in order, end the thread."""
        self._stopping = True
        if self._publish and self._connected:
            said = self._client.publish(self._root + "alive", last_word, qos=1, retain=True)
            # If the connection goes meanwhile, the last will speaks for us.
            with contextlib.suppress(RuntimeError, ValueError):
                said.wait_for_publish(wait_s)
        self._client.disconnect()
        self._client.loop_stop()
        self._close_socket()
        self._connected = False

    def watch(self) -> None:
        """Begin anew if the network thread died; call it about once a second."""
        if self._stopping or self._thread is None or self._thread.is_alive():
            return
        self._tell("network thread restarted", "it had ended without being asked to")
        self._thread = None
        self._lost()
        self._close_socket()
        self._client = self._build()  # one client whose thread died is not to be trusted
        self.start()

    def acknowledge(self, tokens: Iterable[Token]) -> int:
        """Tell the broker that these are safely stored; how many it was told of.

        A token of an earlier connection is dropped: its number may mean another
        message by now, and the broker sends the old one again anyway.
        """
        told = 0
        for token in tokens:
            with self._lock:
                if token.qos and self._connected and token.generation == self._generation:
                    self._client.ack(token.mid, token.qos)
                    told += 1
        return told

    def publish(self, topic: str, payload: bytes, *, retain: bool = False, qos: int = 0) -> bool:
        """Send one message below platewatch/<plate>/; False when that is off or not possible.

        Without a connection QoS 0 is let go, QoS 1 waits in a bounded queue.
        Raises MessageError for a topic outside our own root.
        """
        if not topic.startswith(self._root) or any(mark in topic for mark in "+#"):
            raise MessageError(f"{topic!r} is not below {self._root}; platewatch sends only there")
        if not self._publish or (qos == 0 and not self._connected):
            return False
        return self._client.publish(topic, payload, qos=qos, retain=retain).rc == 0

    def alive(self, word: bytes = b"alive") -> bool:
        """Say that the daemon's loop still turns, at most every 5 s; True when sent."""
        now = self._clock.monotonic()
        if not self._connected or now - self._last_alive < ALIVE_EVERY_S:
            return False
        self._last_alive = now
        return self.publish(self._root + "alive", word, retain=True)

    def _close_socket(self) -> None:
        """paho leaves it open when its thread ended before it had said goodbye."""
        left = self._client.socket()
        if left is not None:
            left.close()

    def _build(self) -> Client:
        client = Client(
            CallbackAPIVersion.VERSION2,
            client_id=self.client_name,
            clean_session=False,
            protocol=MQTTv311,
            manual_ack=True,
        )
        client.suppress_exceptions = True  # one in a callback would end the network thread
        client.reconnect_delay_set(1, self._longest_wait_s)
        client.max_queued_messages_set(1000)
        client.max_inflight_messages_set(100)
        if self._tls is not None:
            client.tls_set_context(self._tls)
        if self._user:
            client.username_pw_set(self._user, self._password)
        if self._publish:
            client.will_set(self._root + "alive", self._will, qos=1, retain=True)
        client.on_pre_connect = self._on_pre_connect
        client.on_connect = self._on_connect
        client.on_connect_fail = self._on_connect_fail
        client.on_disconnect = self._on_disconnect
        client.on_subscribe = self._on_subscribe
        client.on_message = self._on_message
        return client

    def _secret(self, secret_file: str, plain_password: bool) -> str | None:
        if self._tls is None and self.host not in LOCAL_HOSTS and not plain_password:
            raise SettingsError(
                f"bus: the password of {self._user!r} would travel to {self.host} unencrypted; "
                "name the broker's ca_file"
            )
        return read_secret(secret_file) if secret_file else None

    def _on_pre_connect(self, client: Client, userdata: Any) -> None:
        self._thread = threading.current_thread()

    def _on_connect(
        self,
        client: Client,
        userdata: Any,
        flags: ConnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        try:
            if reason.is_failure:
                self._trouble("refused", f"{self.host}:{self.port}: {reason}")
                return
            with self._lock:
                self._generation += 1
                self._connected = True
            self._connected_at = self._clock.monotonic()
            self._last_alive = float("-inf")
            self._last_trouble = ""
            self._tell("connected", f"{self.host}:{self.port} as {self.client_name}")
            if self._ever_connected and not flags.session_present:
                self._tell(
                    "session forgotten",
                    "the broker kept nothing for us; messages may be missing. "
                    "Let it keep persistent sessions",
                )
            self._ever_connected = True
            client.subscribe([(topic, 1) for topic in self._topics])
        except Exception as error:  # the thread must live
            self._tell("callback failed", f"on connecting: {error!r}")

    def _on_connect_fail(self, client: Client, userdata: Any) -> None:
        hint = " or its certificate does not fit ca_file and host" if self._tls is not None else ""
        self._trouble("no broker", f"{self.host}:{self.port} does not answer{hint}; trying again")

    def _on_disconnect(
        self,
        client: Client,
        userdata: Any,
        flags: DisconnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        try:
            was_connected = self._connected
            self._lost()
            if was_connected and not self._stopping:
                self._tell("lost", f"{self.host}:{self.port}: {reason}")
                self._count_short(self._clock.monotonic() - self._connected_at)
        except Exception as error:
            self._tell("callback failed", f"on losing the broker: {error!r}")

    def _lost(self) -> None:
        with self._lock:
            self._generation += 1
            self._connected = False

    def _count_short(self, lasted_s: float) -> None:
        self._short = self._short + 1 if lasted_s < SHORT_CONNECTION_S else 0
        if self._short == SHORT_IN_A_ROW:
            self._tell(
                "taken over",
                f"thrown out {SHORT_IN_A_ROW} times at once: another client calls itself "
                f"{self.client_name!r}; stop it or give one of them another client_name",
            )

    def _on_subscribe(
        self,
        client: Client,
        userdata: Any,
        mid: int,
        reasons: list[ReasonCode],
        properties: Properties | None,
    ) -> None:
        try:
            for topic, reason in zip(self._topics, reasons, strict=False):
                if reason.is_failure:
                    self._tell("subscription refused", f"{topic}: {reason}; check the topic rights")
                elif reason.value == 0:
                    self._tell("subscription refused", f"{topic}: granted QoS 0 only; loses data")
        except Exception as error:
            self._tell("callback failed", f"on subscribing: {error!r}")

    def _on_message(self, client: Client, userdata: Any, message: MQTTMessage) -> None:
        try:
            self.received += 1
            self._last_message = self._clock.monotonic()
            token = Token(self._generation, message.mid, message.qos)
            self._sink.put_nowait(
                Arrival(
                    message.topic,
                    bytes(message.payload),
                    message.retain,
                    message.dup,
                    token,
                    self._clock.utc_us(),
                )
            )
        except queue.Full:
            self.dropped += 1
            if self.dropped & (self.dropped - 1) == 0:  # 1, 2, 4, 8, ...
                self._tell("queue full", f"{self.dropped} messages not taken so far")
        except Exception as error:
            self._tell("callback failed", f"on a message: {error!r}")

    def _trouble(self, what: str, text: str) -> None:
        """Tell of a lasting trouble once, not at every attempt."""
        if what != self._last_trouble:
            self._last_trouble = what
            self._tell(what, text)

    def _tell(self, what: str, text: str) -> None:
        self.events.put(BusEvent(what, text, self._clock.utc_us()))


def tls_context(ca_file: str) -> ssl.SSLContext:
    """TLS 1.2 or newer, the broker's certificate and name always checked."""
    try:
        context = ssl.create_default_context(cafile=ca_file)
    except (OSError, ssl.SSLError) as error:
        raise SettingsError(f"bus: ca_file {ca_file!r} cannot be used: {error}") from None
    context.minimum_version = ssl.TLSVersion.TLSv1_2
    return context


def read_secret(secret_file: str) -> str:
    """The password: the file's first line.  Others must not be able to read it."""
    path = Path(secret_file)
    try:
        mode = path.stat().st_mode
        lines = path.read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise SettingsError(f"bus: secret_file {secret_file!r} cannot be read: {error}") from None
    if mode & 0o077:
        raise SettingsError(
            f"bus: secret_file {secret_file!r} is open to other users; chmod 600 {secret_file}"
        )
    if not lines or not lines[0].strip():
        raise SettingsError(f"bus: secret_file {secret_file!r} is empty; put the password into it")
    return lines[0].strip()
