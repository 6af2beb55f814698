"""kill -9 and broker restarts under load: nothing that the broker took is missing.

PLATEWATCH_KILLS=200 PLATEWATCH_BROKER_RESTARTS=25 for the long form.
"""

from __future__ import annotations

import itertools
import os
import random
import shutil
import sqlite3
import subprocess
import sys
import time
from pathlib import Path

import pytest
from live_plate import PLATE, Daemon, count, wait_for

from platewatch.adapters.broker import free_port
from platewatch.adapters.storage import Store

pytestmark = [
    pytest.mark.broker,
    pytest.mark.skipif(not shutil.which("mosquitto"), reason="needs the mosquitto broker"),
]

KILLS = int(os.environ.get("PLATEWATCH_KILLS", "25"))
RESTARTS = int(os.environ.get("PLATEWATCH_BROKER_RESTARTS", "2"))
RATE = float(os.environ.get("PLATEWATCH_RATE", "1000"))
CONFIG = PLATE.with_name("mosquitto-platewatch.conf")
PREHEATER = PLATE.with_name("preheater.toml")


class Broker:
    """mosquitto with the settings that platewatch recommends, on a port of the test's."""

    def __init__(self, folder: Path) -> None:
        self.port = free_port()
        text = CONFIG.read_text().replace("listener 1883", f"listener {self.port}")
        text = text.replace("/var/lib/mosquitto/", f"{folder}/")
        self._config = folder / "mosquitto.conf"
        self._config.write_text(f"{text}\nuser root\n")
        self.start()

    def start(self) -> None:
        self._process = subprocess.Popen(
            ["mosquitto", "-c", str(self._config)], stderr=subprocess.DEVNULL
        )

    def stop(self) -> None:
        self._process.terminate()
        self._process.wait(30)


def announced(logs: list[str]) -> list[str]:
    """Every alarm that any run of the daemon told, as "alarm subject"."""
    lines = [line for log in logs for line in log.splitlines() if ": ALARM " in line]
    return [" ".join(line.split(": ALARM ", 1)[1].split(":")[0].split()[1:]) for line in lines]


@pytest.mark.timeout(120 + 8 * KILLS)
def test_no_kill_and_no_broker_restart_loses_or_doubles_a_reading(tmp_path: Path) -> None:
    """Job, M10: 0 acknowledged readings lost, 0 rows twice, integrity ok, alarms kept."""
    record, taken = tmp_path / "r.sqlite", tmp_path / "taken.txt"
    dice = random.Random(20261)
    broker = Broker(tmp_path)
    script = Path(__file__).with_name("steady_gateway.py")
    first = Daemon(broker.port, record, plate=PREHEATER)
    assert first.said("connected:", 30), first.log
    time.sleep(0.5)
    # From here on the broker keeps what comes for platewatch.
    gateway = subprocess.Popen(
        [sys.executable, str(script), str(broker.port), str(RATE), str(taken)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    restarts = set(dice.sample(range(1, KILLS), RESTARTS))
    logs: list[str] = []
    try:
        assert first.said("peak-now P2", 40), first.log
        first.kill()  # in the very moment in which the alarm was announced
        logs.append(first.log)
        for number in range(1, KILLS):
            daemon = Daemon(broker.port, record, plate=PREHEATER)
            assert daemon.said("connected:", 30), daemon.log
            if number in restarts:
                broker.stop()
                time.sleep(dice.uniform(0.1, 0.5))
                broker.start()
                assert wait_for(lambda d=daemon: d.log.count("connected:") == 2, 20)  # type: ignore[misc]
            time.sleep(dice.uniform(0.05, 1.5))
            daemon.kill()
            logs.append(daemon.log)
        daemon = Daemon(broker.port, record, plate=PREHEATER)
        assert daemon.said("connected:", 30)
        told, _ = gateway.communicate("", timeout=60)
        wanted = set(taken.read_text().splitlines())
        assert wait_for(lambda: count(record, "reading") >= len(wanted), 60)
        assert daemon.terminate() == 0
        logs.append(daemon.log)
    finally:
        gateway.kill()
        broker.stop()
    connection = sqlite3.connect(record)
    query = "SELECT at_us || ' ' || name FROM reading JOIN channel ON channel.id = channel_id"
    stored = [row[0] for row in connection.execute(query)]
    late = connection.execute("SELECT count(*) FROM reading WHERE flags & 1").fetchone()[0]
    connection.close()
    print(told, f"{len(stored)} stored, {late} late; {KILLS} kills, {RESTARTS} broker restarts")
    assert len(wanted) > 1000
    assert not wanted - set(stored), "taken by the broker and not in the record"
    assert len(stored) == len(set(stored))
    assert "Traceback" not in "".join(logs)
    with Store.open(str(record), read_only=True) as store:
        assert store.verify().findings == ()
        kept = [row.event for row in store.alarm_events("preheater")]
    raised = [f"{e.alarm} {e.subject}" for e in kept if e.to_state == "unacknowledged"]
    said = announced(logs)
    print(f"alarms announced {len(said)}, on record {len(raised)}")
    assert "peak-now P2" in said
    assert all(said.count(name) <= raised.count(name) for name in said)
    for earlier, later in itertools.pairwise(kept):
        if (earlier.alarm, earlier.subject) == (later.alarm, later.subject):
            assert earlier.to_state == later.from_state, "a state was forgotten over a kill"
