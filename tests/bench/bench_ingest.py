"""The bus into the record: broker to durable commit to acknowledgement, beside bare paho.

Run: python -m tests.bench.bench_ingest [MESSAGES]      (needs mosquitto)

Each round fills persistent QoS 1 sessions of mosquitto with the same messages while nobody
listens, then drains them, in turns, so that a busy machine slows all:
- bare: a paho client that acknowledges in its callback and does nothing else;
- plain: paho, json and sqlite3 in 20 lines, acknowledging after the commit, the least that a
  program must do that loses nothing;
- platewatch: the daemon's own loop (strict decode, ticks, estimator without causes, commit
  with synchronous FULL, acknowledgement after it).
Messages are 1 ms apart by their stamps, so ticks are few and it is the way of the messages
that is measured.
Budget: at least 0.7 of bare paho for messages of one reading, in-flight limit 1000.
"""

from __future__ import annotations

import json
import logging
import queue
import sqlite3
import statistics
import sys
import tempfile
import threading
import time
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from paho.mqtt.client import Client, MQTTMessage
from paho.mqtt.enums import CallbackAPIVersion

from platewatch import compose
from platewatch.clock import SystemClock
from platewatch.daemon import IDLE_S
from platewatch.daemon_plate import PlateRun
from platewatch.daemon_writer import Writer
from tests.contract.broker_process import HAVE_MOSQUITTO, HOST, Mosquitto

DEMO = Path(__file__).parents[2] / "config" / "demo-table.toml"
TOPIC = "plates/table-1/readings"
CHANNELS = [*(f"sensor/T{n}" for n in range(1, 10)), *(f"zone/Z{n}/duty" for n in range(1, 4))]
BUDGET, ROUNDS, MESSAGES = 0.7, 3, 10_000
APART_US = 1_000


def payload(at_us: int, n: int, readings: int) -> bytes:
    """120 degC and a little noise, as a gateway writes it."""
    parts = [f'"{name}":{120 + (n * 7 + i) % 10 / 10:.1f}' for i, name in enumerate(CHANNELS[:9])]
    parts += [f'"{name}":{0.25 + n % 5 / 100:.2f}' for name in CHANNELS[9:]]
    return f'{{"at_us":{at_us},{",".join(parts[:readings])}}}'.encode()


def client(name: str, clean: bool = False) -> Client:
    return Client(
        CallbackAPIVersion.VERSION2, client_id=name, clean_session=clean, manual_ack=not clean
    )


def open_session(port: int, name: str) -> None:
    """Make the broker keep what comes for this name."""
    there = threading.Event()
    opener = client(name)
    opener.on_connect = lambda c, *_: c.subscribe("plates/table-1/#", 1)
    opener.on_subscribe = lambda *_: there.set()
    opener.connect(HOST, port)
    opener.loop_start()
    assert there.wait(5)
    opener.disconnect()
    opener.loop_stop()


def fill(port: int, messages: int, readings: int) -> None:
    """Publish, and wait until the broker has taken every one."""
    taken = threading.Semaphore(0)
    gateway = client("gateway", clean=True)
    gateway.max_inflight_messages_set(500)
    gateway.max_queued_messages_set(0)
    gateway.on_publish = lambda *_: taken.release()
    gateway.connect(HOST, port)
    gateway.loop_start()
    first_us = time.time_ns() // 1000 - messages * APART_US
    for n in range(messages):
        gateway.publish(TOPIC, payload(first_us + n * APART_US, n, readings), qos=1)
    for _ in range(messages):
        assert taken.acquire(timeout=30)
    gateway.disconnect()
    gateway.loop_stop()


def drain_by_paho(port: int, name: str, messages: int) -> float:
    """Seconds from the first message to the acknowledgement of the last."""
    times: list[float] = []
    done = threading.Event()
    listener = client(name)

    def on_message(c: Client, userdata: object, message: MQTTMessage) -> None:
        times.append(time.perf_counter())
        c.ack(message.mid, message.qos)
        if len(times) == messages:
            done.set()

    listener.on_message = on_message
    listener.connect(HOST, port)
    listener.loop_start()
    assert done.wait(120), f"{len(times)} of {messages}"
    listener.disconnect()
    listener.loop_stop()
    return time.perf_counter() - times[0]


def drain_plainly(port: int, name: str, folder: Path, messages: int) -> float:
    """The same, each message first decoded and committed."""
    arrived: queue.SimpleQueue[MQTTMessage] = queue.SimpleQueue()
    database = sqlite3.connect(folder / f"{time.time_ns()}.sqlite", isolation_level=None)
    database.execute("PRAGMA journal_mode=WAL")
    database.execute("PRAGMA synchronous=FULL")
    database.execute(
        "CREATE TABLE r (at_us INTEGER, channel TEXT, value REAL, PRIMARY KEY (at_us, channel))"
        " WITHOUT ROWID"
    )
    listener = client(name)
    listener.on_message = lambda c, userdata, message: arrived.put(message)
    listener.connect(HOST, port)
    listener.loop_start()
    done, began = 0, 0.0
    while done < messages:
        batch = [arrived.get(timeout=30)]
        began = began or time.perf_counter()
        while len(batch) < 1000 and not arrived.empty():
            batch.append(arrived.get())
        rows = []
        for message in batch:
            found = json.loads(message.payload)
            at_us = found.pop("at_us")
            rows += [(at_us, channel, value) for channel, value in found.items()]
        database.execute("BEGIN IMMEDIATE")
        database.executemany("INSERT OR IGNORE INTO r VALUES (?, ?, ?)", rows)
        database.execute("COMMIT")
        for message in batch:
            listener.ack(message.mid, message.qos)
        done += len(batch)
    took = time.perf_counter() - began
    listener.disconnect()
    listener.loop_stop()
    database.close()
    return took


def drain_by_platewatch(
    description: compose.Description,
    monitor: compose.Monitor,
    folder: Path,
    messages: int,
    readings: int,
) -> float:
    """The same by the daemon's loop into a new record."""
    log = logging.getLogger("bench")
    log.setLevel(logging.CRITICAL)
    clock = SystemClock()
    with compose.open_store(str(folder / f"{time.time_ns()}.sqlite")) as store:
        writer = Writer(store, clock, log, ["table-1"], (90, 400))
        run = PlateRun(description, monitor, writer, clock, log)
        acknowledged, began = 0, 0.0
        inner = run._bus.acknowledge

        def count(tokens: Sequence[compose.Token]) -> int:
            nonlocal acknowledged
            told = inner(tokens)
            acknowledged += told
            return told

        run._bus.acknowledge = count  # type: ignore[method-assign, assignment]
        run.start()
        while acknowledged < messages:
            began = began or (time.perf_counter() if run._bus.received else 0.0)
            if not run.turn():
                time.sleep(IDLE_S)
        took = time.perf_counter() - began
        run.stop()
        writer.close()
        rows = sum(1 for _ in store.read_readings("table-1"))
        assert rows == messages * readings, rows
    return took


def ratio(messages: int, readings: int, inflight: int | None) -> float:
    """Rate of the daemon over the rate of bare paho, medians of one run."""
    described = compose.describe(DEMO)
    monitor = compose.build_monitor(described, causes=False)
    limits = "max_queued_messages 0\n"
    limits += f"max_inflight_messages {inflight}\n" if inflight else ""
    times = []
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        broker = Mosquitto(folder, limits).start()
        description = replace(described, bus=replace(described.bus, host=HOST, port=broker.port))
        ours = description.bus.client_name or "platewatch-table-1"
        try:
            for _ in range(ROUNDS):
                for who in ("bare", "plain", ours):
                    open_session(broker.port, who)
                fill(broker.port, messages, readings)
                times.append(
                    (
                        drain_by_paho(broker.port, "bare", messages),
                        drain_plainly(broker.port, "plain", folder, messages),
                        drain_by_platewatch(description, monitor, folder, messages, readings),
                    )
                )
        finally:
            broker.stop()
    bare, plain, own = (messages / statistics.median(c) for c in zip(*times, strict=True))
    told = "20 (default)" if inflight is None else str(inflight)
    print(
        f"{readings:2} readings a message, in flight {told:12}: bare {bare:6.0f}/s, plain "
        f"{plain:6.0f}/s, platewatch {own:6.0f}/s ({own * readings:.0f} readings/s); "
        f"{own / bare:.2f} of bare, {own / plain:.2f} of plain",
        flush=True,
    )
    return own / bare


def main() -> int:
    if not HAVE_MOSQUITTO:
        print("needs mosquitto")
        return 2
    messages, best = int(sys.argv[1]) if len(sys.argv) > 1 else MESSAGES, 0.0
    for readings in (1, 12):
        for inflight in (None, 1000):
            found = ratio(messages, readings, inflight)
            best = found if (readings, inflight) == (1, 1000) else best
    print(f"ratio {best:.2f}, budget {BUDGET}")
    return 0 if best >= BUDGET else 1


if __name__ == "__main__":
    sys.exit(main())
