"""A running daemon, a broker of its own and a publisher, for the system tests."""

from __future__ import annotations

import atexit
import json
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Callable, Mapping
from pathlib import Path

from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion

from platewatch.units import iso

PLATE = Path(__file__).resolve().parents[2] / "config" / "demo-table.toml"
SENSORS = [f"sensor/T{n}" for n in range(1, 10)]
DUTIES = [f"zone/Z{n}/duty" for n in range(1, 7)]
TABLES = {
    "peak": "*",
    "zone_power": "*",
    "alarm_limit_probability": "*",
    "alarm_event": "at_us, alarm, subject, place, from_state, to_state, priority, value, "
    "limit_value, cause, group_no, person, reason, message",
    "field_shot": "at_us, basis, state",
    "gap": "from_us AS at_us, to_us, what",
}


def wait_for(truth: Callable[[], object], within_s: float) -> bool:
    """Ask again and again until it holds; False when it did not in time."""
    end = time.monotonic() + within_s
    while time.monotonic() < end:
        if truth():
            return True
        time.sleep(0.05)
    return bool(truth())


def rows(record: Path, table: str) -> list[tuple[object, ...]]:
    """What a table holds, in order of time."""
    connection = sqlite3.connect(record)
    try:
        query = f"SELECT {TABLES[table]} FROM {table} ORDER BY at_us"
        return connection.execute(query).fetchall()
    finally:
        connection.close()


def backlog(record: Path) -> list[int]:
    """When readings that came as history were taken."""
    connection = sqlite3.connect(record)
    try:
        return [row[0] for row in connection.execute("SELECT at_us FROM reading WHERE flags & 4")]
    finally:
        connection.close()


def count(record: Path, table: str, where: str = "1") -> int:
    """Rows of a table; none while the daemon has not made it yet."""
    connection = sqlite3.connect(record)
    try:
        known = "SELECT count(*) FROM sqlite_master WHERE name = ?"
        if not connection.execute(known, (table,)).fetchone()[0]:
            return 0
        return int(connection.execute(f"SELECT count(*) FROM {table} WHERE {where}").fetchone()[0])
    finally:
        connection.close()


def assert_same(live: list[tuple[object, ...]], again: list[tuple[object, ...]]) -> None:
    """Row by row: numbers to 1e-9, everything else exactly."""
    assert len(live) == len(again)
    for one, other in zip(live, again, strict=True):
        for a, b in zip(one, other, strict=True):
            if isinstance(a, float) and isinstance(b, float):
                assert abs(a - b) <= 1e-9, (one, other)
            else:
                assert a == b, (one, other)


class Daemon:
    """`platewatch run` as a process of its own, its log in a file."""

    def __init__(
        self, port: int, record: Path, *more: str, plate: Path = PLATE, logs: Path | None = None
    ) -> None:
        name = f"{record.stem}.{time.monotonic_ns()}.log"
        self.log_path = (logs or record.parent) / name
        with self.log_path.open("w") as log:
            self._process = subprocess.Popen(
                [
                    *(sys.executable, "-m", "platewatch", "run", str(plate), *more),
                    *("--broker", f"127.0.0.1:{port}", "--db", str(record)),
                ],
                stderr=log,
            )
        atexit.register(self._process.kill)  # where a test fails before it ends

    @property
    def log(self) -> str:
        return self.log_path.read_text()

    def said(self, text: str, within_s: float = 20.0) -> bool:
        return wait_for(lambda: text in self.log, within_s)

    def terminate(self) -> int:
        self._process.terminate()
        return self._process.wait(20)

    def kill(self) -> None:
        self.signal(signal.SIGKILL)
        self._process.wait(20)

    def signal(self, number: int) -> None:
        self._process.send_signal(number)

    @property
    def running(self) -> bool:
        return self._process.poll() is None


class Gateway:
    """Sends readings of every sensor and duty, QoS 1, with source times."""

    def __init__(self, port: int) -> None:
        self._client = Client(CallbackAPIVersion.VERSION2, client_id="gateway")
        self._client.connect("127.0.0.1", port)
        self._client.loop_start()
        self.sent = 0

    def send(
        self, at_us: int, more: Mapping[str, float] | None = None, plate: str = "table-1"
    ) -> None:
        """A sample of every channel, or for another plate of those given."""
        body: dict[str, object] = {"at": iso(at_us), **(more or {})}
        if plate == "table-1":
            body |= self._values()
        topic = f"plates/{plate}/readings"
        self._client.publish(topic, json.dumps(body), qos=1).wait_for_publish(10)
        self.sent += 1

    def _values(self) -> dict[str, float]:
        values = dict.fromkeys(SENSORS, 120.0 + 0.1 * (self.sent % 3))
        return values | dict.fromkeys(DUTIES, 0.25)

    def send_for(self, seconds: float, every_s: float = 0.25) -> None:
        """Live readings for so long."""
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            self.send(time.time_ns() // 1000)
            time.sleep(every_s)

    def close(self) -> None:
        self._client.disconnect()
        self._client.loop_stop()
