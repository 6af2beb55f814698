"""Does the broker keep sessions?  Asked with a client of its own, which leaves nothing behind."""

from __future__ import annotations

import secrets
import ssl
import threading
from dataclasses import dataclass
from typing import Any

from paho.mqtt.client import Client, ConnectFlags, MQTTv311
from paho.mqtt.enums import CallbackAPIVersion

WAIT_S = 5.0


@dataclass(frozen=True)
class Account:
    """Where to connect and as whom."""

    host: str
    port: int
    tls: ssl.SSLContext | None
    user: str
    password: str | None


def session_is_kept(account: Account, topic: str, wait_s: float = WAIT_S) -> bool | None:
    """Connect, subscribe, disconnect, connect again: is the session there?

    None where it cannot be told, for instance because the broker lets in known names only.
    topic: one that platewatch may read; nothing is taken from it but the subscription.
    """
    name = f"pw-test-{secrets.token_hex(6)}"
    first = _visit(account, name, wait_s, subscribe=topic.rstrip("#") + "session-test")
    if first is None:
        return None
    kept = _visit(account, name, wait_s)
    _visit(account, name, wait_s, clean=True)
    return kept


def _visit(
    account: Account, name: str, wait_s: float, *, subscribe: str = "", clean: bool = False
) -> bool | None:
    """One connection; was a session there?  None where the broker did not let us in."""
    client = Client(
        CallbackAPIVersion.VERSION2, client_id=name, clean_session=clean, protocol=MQTTv311
    )
    if account.tls is not None:
        client.tls_set_context(account.tls)
    if account.user:
        client.username_pw_set(account.user, account.password)
    answered, done = threading.Event(), threading.Event()
    found: list[bool] = []

    def on_connect(_c: Client, _u: Any, flags: ConnectFlags, reason: Any, _p: Any) -> None:
        if not reason.is_failure:
            found.append(flags.session_present)
            if subscribe:
                client.subscribe(subscribe, 1)
        answered.set()

    client.on_connect = on_connect
    client.on_subscribe = lambda *_: done.set()
    try:
        client.connect(account.host, account.port)
        client.loop_start()
        if answered.wait(wait_s) and found and subscribe:
            done.wait(wait_s)
    except OSError:
        return None
    finally:
        client.disconnect()
        client.loop_stop()
    return found[0] if found else None
