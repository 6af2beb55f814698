"""A gateway as a program: one timed reading a message, QoS 1, and a list of what the broker took.

python steady_gateway.py PORT RATE OUT: sends until its input is closed, then waits for the
last acknowledgements and writes one line for each: microseconds and channel.
"""

from __future__ import annotations

import queue
import sys
import threading
import time
from pathlib import Path

from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion

from platewatch.units import iso

SENSORS = ("P1", "P2", "P3")
COOL_DEGC, HOT_DEGC = 60.0, 190.0
CYCLE_S, HOT_S = 90.0, 45.0  # P2 reads far over every limit for so long, from the beginning


def value(sensor: str, after_s: float) -> float:
    return HOT_DEGC if sensor == "P2" and after_s % CYCLE_S < HOT_S else COOL_DEGC


def main(port: int, rate: float, out: Path) -> None:
    sent: dict[int, tuple[int, str]] = {}
    taken: list[tuple[int, str]] = []
    acknowledged: queue.SimpleQueue[int] = queue.SimpleQueue()
    client = Client(CallbackAPIVersion.VERSION2, client_id="steady-gateway")
    client.max_queued_messages_set(0)
    client.max_inflight_messages_set(500)
    client.reconnect_delay_set(1, 1)

    def on_publish(_c: object, _u: object, mid: int, _r: object, _p: object) -> None:
        acknowledged.put(mid)

    def collect() -> None:
        while not acknowledged.empty():
            taken.append(sent.pop(acknowledged.get()))

    client.on_publish = on_publish
    client.connect("127.0.0.1", port)
    client.loop_start()
    ended = threading.Event()
    threading.Thread(target=lambda: (sys.stdin.read(), ended.set()), daemon=True).start()
    begun, number = time.monotonic(), 0
    while not ended.is_set():
        while number < (time.monotonic() - begun) * rate:
            sensor = SENSORS[number % len(SENSORS)]
            at_us = time.time_ns() // 1000
            shown = value(sensor, time.monotonic() - begun)
            body = f'{{"at": "{iso(at_us)}", "sensor/{sensor}": {shown}}}'
            said = client.publish("plates/preheater/readings", body, qos=1)
            # Two messages may share a microsecond; a channel never does.
            sent[said.mid] = (at_us, f"sensor/{sensor}")
            number += 1
        collect()
        time.sleep(0.002)
    until = time.monotonic() + 30
    while sent and time.monotonic() < until:
        collect()
        time.sleep(0.05)
    client.disconnect()
    client.loop_stop()
    lines = [f"{at_us} {channel}\n" for at_us, channel in taken]
    out.write_text("".join(lines))
    print(f"{number} sent, {len(taken)} taken, {number / (time.monotonic() - begun):.0f} a second")


if __name__ == "__main__":
    main(int(sys.argv[1]), float(sys.argv[2]), Path(sys.argv[3]))
