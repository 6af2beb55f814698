"""A simulated batch on the bus, in plate time that may run faster than the clock."""

from __future__ import annotations

import json
import threading
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np
from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from platewatch.errors import NoDataError
from platewatch.units import iso
from sim_sensors.recording import batch_objects
from sim_sensors.simulation import Sample

QUEUED_AT_MOST = 20_000
LAST_ACKNOWLEDGEMENT_S = 5.0

Send = Callable[[str, str], None]


@dataclass(frozen=True)
class Pace:
    """Plate time: `origin_us` when the machine's monotonic clock stood at
    `origin_monotonic`, running `speed` times as fast."""

    origin_us: int
    origin_monotonic: float
    speed: float

    def now_us(self) -> int:
        elapsed = time.monotonic() - self.origin_monotonic
        return self.origin_us + round(elapsed * self.speed * 1e6)

    def seconds_until(self, at_us: int) -> float:
        """Seconds of the machine's clock until plate time `at_us`; 0 when it is past."""
        due = self.origin_monotonic + (at_us - self.origin_us) / 1e6 / self.speed
        return max(0.0, due - time.monotonic())


class Gateway:
    """A connection to the plant's broker that keeps what it could not send yet."""

    def __init__(self, host: str, port: int, client_id: str) -> None:
        self.host, self.port = host, port
        self._connected = threading.Event()
        self._refused = ""
        self._sent = self._acknowledged = 0
        self._client = Client(CallbackAPIVersion.VERSION2, client_id=client_id)
        self._client.max_queued_messages_set(QUEUED_AT_MOST)
        self._client.on_connect = self._on_connect
        self._client.on_disconnect = self._on_disconnect
        self._client.on_publish = self._on_publish

    def open(self, wait_s: float = 10.0) -> Gateway:
        """Connect.  Raises NoDataError where no broker answers within `wait_s`."""
        self._client.connect_async(self.host, self.port)
        self._client.reconnect_delay_set(1, 2)
        self._client.loop_start()
        if not self._connected.wait(wait_s):
            self._client.loop_stop()
            why = self._refused or "no answer"
            raise NoDataError(
                f"no broker at {self.host}:{self.port} ({why}); start one, or correct --publish"
            )
        return self

    def send(self, topic: str, payload: str) -> None:
        """At least once; without a connection it waits for the next one."""
        self._sent += 1
        self._client.publish(topic, payload, qos=1)

    def close(self) -> int:
        """Wait a little for the last acknowledgements; how many are still missing."""
        until = time.monotonic() + LAST_ACKNOWLEDGEMENT_S
        while self._waiting() and self._connected.is_set() and time.monotonic() < until:
            time.sleep(0.02)
        left = self._waiting()
        self._client.disconnect()
        self._client.loop_stop()
        return left

    def _waiting(self) -> int:
        return self._sent - self._acknowledged

    def _on_connect(
        self,
        client: Client,
        userdata: object,
        flags: ConnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        if reason.is_failure:
            self._refused = str(reason)
        else:
            self._connected.set()

    def _on_disconnect(
        self,
        client: Client,
        userdata: object,
        flags: DisconnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        self._connected.clear()

    def _on_publish(
        self,
        client: Client,
        userdata: object,
        mid: int,
        reason: ReasonCode,
        properties: Properties,
    ) -> None:
        self._acknowledged += 1


def publish(
    samples: Iterable[Sample],
    send: Send,
    plate: str,
    *,
    pace: Pace,
    start_us: int,
    stop: threading.Event,
    told: Callable[[Sample], None] = lambda sample: None,
) -> int:
    """Send each sample when plate time reaches its stamp; how many were sent.

    start_us: source time of at_s = 0.  Setting `stop` ends it before the next sample.
    An outage of the broker is `send`'s business: it may hold back or repeat.
    """
    sent = 0
    for sample in samples:
        at_us = start_us + round(sample.at_s * 1e6)
        if stop.wait(pace.seconds_until(at_us)):
            break
        at = iso(at_us)
        for event in batch_objects(at, sample):
            send(f"plates/{plate}/batch", event)
        send(f"plates/{plate}/readings", message(at, sample))
        told(sample)
        sent += 1
    return sent


def message(at: str, sample: Sample) -> str:
    """The flat object with all values; a channel without one is left out."""
    values = {name: v for name, v in sample.readings.items() if not np.isnan(v)}
    return json.dumps({"at": at, **values})
