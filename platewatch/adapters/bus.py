"""The plant's MQTT broker (paho-mqtt): messages in without loss, our own root out.

What makes it lose nothing at QoS 1: a stable client name with a persistent session,
and an acknowledgement only after the commit.  Until then the broker keeps the message.
The broker limits how many messages may wait for that (mosquitto: max_inflight_messages,
20 unless raised).  Commit when the queue runs empty.
"""

from __future__ import annotations

import contextlib
import queue
import socket
import threading
import time
from collections.abc import Iterable, Sequence
from typing import Any

from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags, MQTTMessage, MQTTv311
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from platewatch.adapters.bus_secrets import password_of, tls_context
from platewatch.adapters.bus_selftest import Account, session_is_kept
from platewatch.adapters.bus_values import Arrival, BusEvent, Token
from platewatch.clock import Clock
from platewatch.errors import MessageError

__all__ = ["Arrival", "Bus", "BusEvent", "Token"]

ALIVE_EVERY_S = 5.0
SHORT_CONNECTION_S = 10.0  # ended sooner, it may be another client of our name
SHORT_IN_A_ROW = 3
UNSPECIFIED = 0x80  # what paho gives where the line simply broke
SILENT_AFTER_S = 60.0  # connected, and nothing comes: told once
RENEW_AFTER_S = 300.0  # then the connection is made anew, at twice the interval each time


class _Client(Client):
    """Notes when its network loop last came round."""

    turned_s = float("-inf")  # of the machine's monotonic clock

    def loop_misc(self) -> Any:
        self.turned_s = time.monotonic()
        return super().loop_misc()


class Bus:
    """One connection for one plate.

    topics: what to subscribe to;  sink: bounded queue that receives `Arrival`s
    publish: off means that nothing at all is sent, no last will either
    will: what the broker says for us on platewatch/<plate>/alive (retained) when we
    are lost;  secret_file: holds the password alone, readable by its owner only
    expects_session: an earlier run had one, so the broker should have kept it

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
        expects_session: bool = False,
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
        self._expects_session = expects_session
        self._tested = self._renewing = self._owed = False
        self._renew_at_s, self._told_silent = RENEW_AFTER_S, False
        self._flowed_s = time.monotonic()  # the machine's, whatever pace the clock has
        self._tls = tls_context(ca_file) if ca_file else None
        self._user, self._will, self._longest_wait_s = user, will, longest_wait_s
        self._password = (
            password_of(user, secret_file, self.host, self._tls, plain_password) if user else None
        )
        self._client = self._build()
        self._account = Account(self.host, self.port, self._tls, user, self._password)

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

    def turned_s(self) -> float:
        """Seconds since the network thread came round; while it waits to try again, none."""
        if not self._connected and self.thread_alive:
            return 0.0
        return time.monotonic() - self._client.turned_s

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

    def abandon(self) -> None:
        """Cut the connection without a word: the last will speaks, the session stays."""
        self._stopping = True
        self._connected = False
        self._close_socket()
        self._client.loop_stop()

    def watch(self) -> None:
        """Begin anew if the network thread died or nothing comes; call it once a second."""
        if self._stopping or self._thread is None:
            return
        if self._thread.is_alive():
            self._watch_flow()
            return
        self._tell("network thread restarted", "it had ended without being asked to")
        self._thread = None
        self._lost()
        self._close_socket()
        self._client = self._build()  # one client whose thread died is not to be trusted
        self.start()

    def _watch_flow(self) -> None:
        """A connection that brings nothing, or owes what found the queue full, is renewed."""
        if not self._connected or self._renewing:
            return
        if self._owed and self._sink.qsize() <= self._sink.maxsize // 2:
            self._owed = False
            self._renew("so that messages which found the queue full come again")
            return
        silent_s = time.monotonic() - self._flowed_s
        if silent_s < SILENT_AFTER_S:
            return
        if not self._told_silent:
            self._told_silent = True
            self._tell(
                "silent",
                f"connected, but no message on {', '.join(self._topics)} for {silent_s:.0f} s; "
                "does the gateway send, and below that topic?",
            )
        if silent_s >= self._renew_at_s:
            self._renew_at_s += 2 * silent_s
            self._renew("because nothing has come on it for so long")

    def _renew(self, why: str) -> None:
        """Cut the connection; the network thread makes it anew, and what is owed comes again."""
        line = self._client.socket()
        if not isinstance(line, socket.socket):
            return
        self._renewing = True
        self._tell("renewed", f"connection made anew, {why}")
        with contextlib.suppress(OSError):
            line.shutdown(socket.SHUT_RDWR)

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
        if (left := self._client.socket()) is not None:
            left.close()

    def _build(self) -> _Client:
        client = _Client(
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
            self._flowed_s = self._flowed_s if self._renewing else time.monotonic()
            self._last_alive = float("-inf")
            self._last_trouble = ""
            self._tell("connected", f"{self.host}:{self.port} as {self.client_name}")
            if self._expects_session and not flags.session_present:
                self._tell(
                    "session forgotten",
                    "the broker kept nothing for us; messages may be missing. "
                    "Let it keep persistent sessions",
                )
            self._expects_session = True
            self._renewing = False
            client.subscribe([(topic, 1) for topic in self._topics])
            if not self._tested:
                self._tested = True
                threading.Thread(target=self._test_session, daemon=True).start()
        except Exception as error:  # the thread must live
            self._tell("callback failed", f"on connecting: {error!r}")

    def _test_session(self) -> None:
        """Does the broker keep sessions at all?  Better known now than after a night."""
        try:
            if session_is_kept(self._account, self._topics[0]) is False:
                self._tell(
                    "sessions not kept",
                    f"{self.host}:{self.port} forgets what comes while platewatch is away; "
                    "switch persistent sessions on (mosquitto: see mosquitto-platewatch.conf)",
                )
        except Exception as error:
            self._tell("callback failed", f"on testing the session: {error!r}")

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
            if was_connected and not self._stopping and not self._renewing:
                why = "connection broken" if reason.value == UNSPECIFIED else str(reason)
                self._tell("lost", f"{self.host}:{self.port}: {why}; trying again")
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
            self._flowed_s = time.monotonic()
            self._told_silent, self._renew_at_s = False, RENEW_AFTER_S
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
            self._owed = self._owed or message.qos > 0
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
