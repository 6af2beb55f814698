"""Messages of hundreds of plates through one process, without their estimators.

Run: python -m tests.bench.bench_plates [PLATES]

Every plate sends one message of its 9 thermocouples and 3 duties each 2 s, 250 messages a
second for 500 plates.  Decoded, sorted into ticks and stored in one record, a commit for
each plate as its daemon would do; how many such messages one core takes, and what share of it
real time would need.
"""

from __future__ import annotations

import sys
import tempfile
import time

from platewatch import compose
from platewatch.adapters.messages import Routes
from platewatch.monitor.ticks import Ticker
from platewatch.types import Reading

PLATES, ROUNDS, TICK_US = 500, 20, 2_000_000
SENSORS = {f"T{n}": "degC" for n in range(1, 10)}
ZONES = {f"Z{n}": 1.0 for n in range(1, 4)}
BUDGET = 250.0  # messages a second for 500 plates


def payload(at_us: int, n: int) -> bytes:
    parts = [f'"sensor/{name}":{120 + (n + i) % 10 / 10:.1f}' for i, name in enumerate(SENSORS)]
    parts += [f'"zone/{name}/duty":{0.25 + n % 5 / 100:.2f}' for name in ZONES]
    return f'{{"at_us":{at_us},{",".join(parts)}}}'.encode()


class Plate:
    """One plate's way up to its ticks."""

    def __init__(self, name: str) -> None:
        self.name, self.topic = name, f"plates/{name}/readings"
        self.routes, self.ticker = Routes(name, SENSORS, ZONES), Ticker(TICK_US, TICK_US)
        self.waiting: list[Reading] = []

    def take(self, body: bytes, seen_us: int) -> int:
        """How many ticks closed."""
        found = self.routes.decode(self.topic, body, seen_us)
        assert not found.refusals
        self.waiting += [self.ticker.add(reading) for reading in found.readings]
        return len(self.ticker.close())


def main() -> int:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else PLATES
    plates = [Plate(f"table-{n}") for n in range(count)]
    start_us = time.time_ns() // 1000 // TICK_US * TICK_US
    took_s, stored_s, ticks = 0.0, 0.0, 0
    with tempfile.TemporaryDirectory() as folder, compose.open_store(f"{folder}/r.sqlite") as store:
        for n in range(ROUNDS):
            at_us = start_us + n * TICK_US
            bodies = [payload(at_us, n + i) for i in range(count)]
            begun = time.process_time()
            for plate, body in zip(plates, bodies, strict=True):
                ticks += plate.take(body, at_us)
            took_s += time.process_time() - begun
            begun = time.process_time()
            for plate in plates:
                store.write(plate.name, [], plate.waiting, plate.routes.units, [])
                plate.waiting = []
            stored_s += time.process_time() - begun
    messages = ROUNDS * count
    rate = messages / (took_s + stored_s)
    print(
        f"{count} plates, {messages} messages of 12 readings, {ticks} ticks: decode and ticks "
        f"{1e6 * took_s / messages:.0f} us, store {1e6 * stored_s / messages:.0f} us a message "
        f"(a commit a plate); {rate:.0f} messages/s of CPU, real time needs "
        f"{100 * count / 2 / rate:.1f} % of a core"
    )
    return 0 if rate >= BUDGET else 1


if __name__ == "__main__":
    sys.exit(main())
