"""A real mosquitto of the tests' own, and its command-line clients."""

from __future__ import annotations

import shutil
import socket
import subprocess
import time
from collections.abc import Callable
from pathlib import Path

HOST = "127.0.0.1"
HAVE_MOSQUITTO = all(shutil.which(name) for name in ("mosquitto", "mosquitto_pub", "mosquitto_sub"))


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind((HOST, 0))
        return int(probe.getsockname()[1])


def wait_for(truth: Callable[[], object], within_s: float = 8.0) -> bool:
    """Ask again and again until it holds; False when it did not in time."""
    end = time.monotonic() + within_s
    while time.monotonic() < end:
        if truth():
            return True
        time.sleep(0.02)
    return bool(truth())


class Mosquitto:
    """The broker with its own folder; its sessions outlive a restart."""

    def __init__(self, folder: Path, extra: str = "") -> None:
        self.port = free_port()
        self._config = folder / "mosquitto.conf"
        self._config.write_text(
            f"listener {self.port} {HOST}\nallow_anonymous true\n"
            f"persistence true\npersistence_location {folder}/\nuser root\n{extra}"
        )
        self._place = ("-h", HOST, "-p", str(self.port))
        self._process: subprocess.Popen[bytes] | None = None

    def start(self) -> Mosquitto:
        self._process = subprocess.Popen(
            ["mosquitto", "-c", str(self._config)],
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        assert wait_for(self._answers), "mosquitto did not start"
        return self

    def stop(self) -> None:
        if self._process is not None:
            self._process.terminate()
            self._process.wait(10)
            self._process = None

    def publish(self, topic: str, payload: str, *more: str) -> None:
        subprocess.run(
            ["mosquitto_pub", *self._place, "-t", topic, "-m", payload, "-q", "1", *more],
            check=True,
            timeout=10,
        )

    def listen(self, topic: str, count: int, within_s: int = 8) -> list[str]:
        """The next `count` messages as "topic payload" lines, retained ones included."""
        done = subprocess.run(
            ["mosquitto_sub", *self._place, *f"-t {topic} -v -C {count} -W {within_s}".split()],
            check=False,
            timeout=within_s + 5,
            capture_output=True,
            text=True,
        )
        return done.stdout.splitlines()

    def _answers(self) -> bool:
        try:
            with socket.create_connection((HOST, self.port), timeout=0.2):
                return True
        except OSError:
            return False
