"""The embedded broker of the demonstration and the tests (iotcore), on 127.0.0.1 only."""

from __future__ import annotations

import importlib
import socket
from types import TracebackType
from typing import Any

from platewatch.errors import NoDataError, SettingsError

HOST = "127.0.0.1"
LARGEST_PAYLOAD = 131_072  # bytes; above what platewatch reads, so that it judges itself


class EmbeddedBroker:
    """An MQTT broker in a child process that ends with this one.

    port: 0 takes a free one.  `start` returns when it listens.  Raises SettingsError
    where the extra is missing or the port taken, NoDataError where it does not start.
    """

    def __init__(self, port: int = 0) -> None:
        if not 0 <= port <= 65_535:
            raise SettingsError(f"broker port {port} is no port; give 1 to 65535, or 0 for any")
        self._wanted = port
        self._broker: Any = None
        self.port = port

    @property
    def running(self) -> bool:
        return self._broker is not None and bool(self._broker.is_running)

    def start(self, timeout_s: float = 10.0) -> EmbeddedBroker:
        if self.running:
            return self
        maker = _library().Broker
        self.port = self._wanted or free_port()
        _check_free(self.port)
        broker = maker(
            port=self.port,
            listen=HOST,
            max_payload_size=LARGEST_PAYLOAD,
            max_inflight_count=1000,
        )
        try:
            broker.start(timeout=timeout_s)
        except OSError:
            raise _taken(self.port) from None
        except RuntimeError as error:
            raise NoDataError(f"the embedded broker did not start: {error}") from None
        self._broker = broker
        return self

    def stop(self) -> None:
        """End it and free the port; safe to call twice."""
        if self._broker is not None:
            self._broker.stop()
            self._broker = None

    def __enter__(self) -> EmbeddedBroker:
        return self.start()

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.stop()


def free_port() -> int:
    """A port of 127.0.0.1 that nobody uses at this moment."""
    with socket.socket() as probe:
        probe.bind((HOST, 0))
        return int(probe.getsockname()[1])


def _library() -> Any:
    try:
        return importlib.import_module("iotcore")
    except ImportError:
        raise SettingsError(
            "the embedded broker is not installed; pip install 'platewatch[demo]', "
            "or name a broker of your own in [bus]"
        ) from None


def _check_free(port: int) -> None:
    with socket.socket() as probe:
        probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind((HOST, port))
        except PermissionError:
            raise SettingsError(f"port {port} is reserved; choose one above 1023") from None
        except OSError:
            raise _taken(port) from None


def _taken(port: int) -> SettingsError:
    return SettingsError(
        f"port {port} of {HOST} is in use, perhaps by another broker; "
        "stop that one or choose another port"
    )
