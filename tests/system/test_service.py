"""What a service manager sees: ready, watchdog, reload, stop; plates that do not hang together."""

from __future__ import annotations

import contextlib
import itertools
import logging
import os
import signal
import socket
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from live_plate import PLATE, Daemon, Gateway, count, wait_for

from platewatch import compose
from platewatch.adapters.broker import EmbeddedBroker, free_port
from platewatch.clock import SystemClock
from platewatch.daemon import run_daemon
from platewatch.daemon_plate import PlateRun
from platewatch.daemon_service import Service

pytest.importorskip("iotcore", reason="needs the extra platewatch[demo]")

PREHEATER = PLATE.with_name("preheater.toml")


@contextlib.contextmanager
def manager(folder: Path) -> Iterator[socket.socket]:
    """The socket at which a service manager listens."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as listener:
        listener.bind(str(folder / "notify"))
        listener.settimeout(20)
        yield listener


def heard(listener: socket.socket, word: str) -> str:
    """The next datagram that has this word in it."""
    while True:
        text = listener.recv(4096).decode()
        if word in text:
            return text


def test_a_service_manager_hears_ready_alive_reloading_and_stopping(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """sd_notify(3).  A description with a mistake is not taken over; a good one is."""
    plate, record = tmp_path / "plate.toml", tmp_path / "r.sqlite"
    good = PREHEATER.read_text()
    plate.write_text(good)
    monkeypatch.setenv("NOTIFY_SOCKET", str(tmp_path / "notify"))
    monkeypatch.setenv("WATCHDOG_USEC", "3000000")
    with manager(tmp_path) as listener:
        daemon = Daemon(free_port(), record, plate=plate)
        assert "preheater" in heard(listener, "READY=1")
        heard(listener, "WATCHDOG=1")
        plate.write_text(good.replace("x_mm = 40", "x_mm = 4000"))
        daemon.signal(signal.SIGHUP)
        heard(listener, "RELOADING=1")
        heard(listener, "READY=1")
        assert daemon.said("not reloaded, going on with the present description")
        assert "lies outside the outline" in daemon.log
        assert daemon.log.count("run 1 starts") == 1
        plate.write_text(good.replace("keep_days = ", "keep_days = 1") + "\n# another\n")
        daemon.signal(signal.SIGHUP)
        assert daemon.said("run 2 starts")
        assert daemon.log.index("run 1 stopped") < daemon.log.index("run 2 starts")
        daemon.signal(signal.SIGTERM)
        heard(listener, "STOPPING=1")
    assert daemon.terminate() == 0


def test_the_watchdog_is_not_fed_while_something_stands_still(tmp_path: Path) -> None:
    """Fed three times in its period, and only if everything has moved."""
    with manager(tmp_path) as listener:
        service = Service({"NOTIFY_SOCKET": str(tmp_path / "notify"), "WATCHDOG_USEC": "300000"})
        assert not service.feed(lambda: False)
        assert service.feed(lambda: True)
        assert not service.feed(lambda: True), "not before a third of the period"
        time.sleep(0.11)
        assert service.feed(lambda: True)
        listener.settimeout(0.5)
        assert [listener.recv(99) for _ in range(2)] == [b"WATCHDOG=1"] * 2
        with pytest.raises(TimeoutError):
            listener.recv(99)


def test_without_a_service_manager_nothing_is_said() -> None:
    """Also where the watchdog is another process's."""
    assert not Service({}).feed(lambda: True)
    other = {"WATCHDOG_USEC": "300000", "WATCHDOG_PID": str(os.getpid() + 1)}
    assert not Service(other).feed(lambda: True)


class Watching:
    """A daemon in a thread with two plates, of which one can be made to fail or to be slow."""

    def __init__(self, port: int, record: Path) -> None:
        self.turns: dict[str, list[float]] = {}
        self.fault: Exception | None = None
        self.stop = threading.Event()
        self.said: list[str] = []
        voice = logging.Logger("two plates", logging.INFO)
        handler = logging.Handler()
        handler.emit = lambda line: self.said.append(line.getMessage())  # type: ignore[method-assign]
        voice.addHandler(handler)
        plates = [
            compose.with_broker(compose.describe(path), f"127.0.0.1:{port}")
            for path in (PLATE, PREHEATER)
        ]
        self._thread = threading.Thread(
            target=run_daemon,
            args=(plates, SystemClock(), voice, self.stop),
            kwargs={"database": str(record), "each_turn": self._turned},
        )
        self._thread.start()

    def _turned(self, run: PlateRun) -> None:
        self.turns.setdefault(run.plate, []).append(time.monotonic())
        if run.plate == "table-1" and self.fault is not None:
            fault, self.fault = self.fault, None
            raise fault

    def end(self) -> None:
        self.stop.set()
        self._thread.join(20)


def longest_pause_s(times: list[float], since_s: float) -> float:
    after = [since_s, *(at for at in times if at > since_s)]
    return max(b - a for a, b in itertools.pairwise(after))


@pytest.mark.timeout(90)
def test_a_fault_or_a_long_backlog_of_one_plate_leaves_the_other_alone(tmp_path: Path) -> None:
    """Design, section 10a: the others are delayed by at most a second; the plate with the
    fault is begun anew from its record and loses nothing."""
    record = tmp_path / "r.sqlite"
    with EmbeddedBroker() as broker:
        watching = Watching(broker.port, record)
        gateway = Gateway(broker.port)
        try:
            assert wait_for(lambda: sum("connected:" in t for t in watching.said) == 2, 20)
            time.sleep(0.3)
            begun_s = time.monotonic()
            now_us = time.time_ns() // 1000
            for number in range(300):  # ten minutes of samples at once
                gateway.send(now_us - 600_000_000 + 2_000_000 * number)
            assert wait_for(lambda: count(record, "peak") >= 290, 30)
            watching.fault = RuntimeError("a mistake of ours")
            assert wait_for(lambda: any("a fault of platewatch" in t for t in watching.said), 10)
            gateway.send_for(6.0)
            wanted = gateway.sent * 15
            assert wait_for(lambda: count(record, "reading") == wanted, 20)
            assert longest_pause_s(watching.turns["preheater"], begun_s) < 1.0
            assert sum("run " in t and "starts" in t for t in watching.said) == 3
        finally:
            watching.end()
            gateway.close()
