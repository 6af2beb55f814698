"""What a service manager is told: ready, alive, reloading, stopping (sd_notify, systemd).

The protocol is one datagram to the socket that NOTIFY_SOCKET names; see sd_notify(3).
"""

from __future__ import annotations

import contextlib
import os
import socket
import time
from collections.abc import Callable, Mapping


class Service:
    """Speaks to the service manager that started us; without one it says nothing."""

    def __init__(self, environment: Mapping[str, str] | None = None) -> None:
        found = os.environ if environment is None else environment
        self._address = found.get("NOTIFY_SOCKET", "")
        period_us = found.get("WATCHDOG_USEC", "")
        mine = found.get("WATCHDOG_PID", "") in ("", str(os.getpid()))
        self._every_s = int(period_us) / 3e6 if period_us.isdecimal() and mine else None
        self._fed_s = float("-inf")

    def ready(self, status: str) -> None:
        self._say(f"READY=1\nSTATUS={status}")

    def reloading(self) -> None:
        self._say(f"RELOADING=1\nMONOTONIC_USEC={time.monotonic_ns() // 1000}")

    def stopping(self) -> None:
        self._say("STOPPING=1")

    def feed(self, progressed: Callable[[], bool]) -> bool:
        """Feed the watchdog three times in its period, if all that must move has moved."""
        now_s = time.monotonic()
        if self._every_s is None or now_s - self._fed_s < self._every_s or not progressed():
            return False
        self._fed_s = now_s
        self._say("WATCHDOG=1")
        return True

    def _say(self, text: str) -> None:
        if not self._address:
            return
        # An address that begins with @ is an abstract one (unix(7)).
        address = "\0" + self._address[1:] if self._address[0] == "@" else self._address
        with contextlib.suppress(OSError), socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as line:
            line.sendto(text.encode(), address)
