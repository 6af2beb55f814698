"""A disk that fills up and is freed again, on a small file system of its own."""

from __future__ import annotations

import os
import sqlite3
import subprocess
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from live_plate import Daemon, Gateway, count, wait_for

from platewatch.adapters.broker import EmbeddedBroker

pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")

CHANNELS = 15
ROOM = "6m"


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A tmpfs of 6 MB; only root may mount one."""
    disk = tmp_path / "disk"
    disk.mkdir()
    mounted = (
        os.geteuid() == 0
        and not subprocess.run(
            ["mount", "-t", "tmpfs", "-o", f"size={ROOM}", "tmpfs", str(disk)], capture_output=True
        ).returncode
    )
    if not mounted:
        pytest.skip("needs to be root and to mount a tmpfs")
    yield disk
    subprocess.run(["umount", "-l", str(disk)], check=True)


def fill(disk: Path) -> Path:
    """Use up every byte that is left."""
    filler = disk / "filler"
    with filler.open("wb", buffering=0) as file:
        size = 1 << 16
        while size:
            try:
                while file.write(b"x" * size) == size:
                    pass
            except OSError:
                pass
            size //= 2
    return filler


def alarms(record: Path) -> list[tuple[str, str, str]]:
    connection = sqlite3.connect(f"file:{record}?mode=ro", uri=True)
    try:
        query = "SELECT alarm, subject, priority FROM alarm_event WHERE to_state='unacknowledged'"
        return connection.execute(query).fetchall()
    finally:
        connection.close()


@pytest.mark.timeout(120)
def test_a_full_disk_is_told_early_and_loses_no_reading(small_disk: Path) -> None:
    """Job, M15: it keeps running, alarms are still stored at 0 bytes free, and when there
    is room again every reading is in the record."""
    record = small_disk / "r.sqlite"
    with EmbeddedBroker() as broker:
        gateway = Gateway(broker.port)
        daemon = Daemon(broker.port, record, logs=small_disk.parent)
        assert daemon.said("connected")
        gateway.send_for(5.0)
        assert wait_for(lambda: ("store-failing", "room", "low") in alarms(record), 10)
        filler = fill(small_disk)
        assert os.statvfs(small_disk).f_bavail == 0
        full_until = time.monotonic() + 40
        while time.monotonic() < full_until:
            gateway.send_for(1.0)
            if ("store-failing", "record", "low") in alarms(record):
                break
        print(daemon.log)
        print(subprocess.run(["ls", "-la", str(small_disk)], capture_output=True, text=True).stdout)
        assert ("store-failing", "record", "low") in alarms(record), "stored on a full disk"
        before = count(record, "reading")
        peaks = count(record, "peak")
        gateway.send_for(4.0)
        assert count(record, "reading") < gateway.sent * CHANNELS
        assert wait_for(lambda: count(record, "peak") > peaks, 6), "the plate is still watched"
        filler.unlink()
        assert wait_for(lambda: count(record, "reading") == gateway.sent * CHANNELS, 20)
        assert count(record, "reading") > before
        assert daemon.terminate() == 0
        gateway.close()
    assert "the record is being written again" in daemon.log
    assert "Traceback" not in daemon.log
    print(daemon.log)
    connection = sqlite3.connect(record)
    assert connection.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    connection.close()
