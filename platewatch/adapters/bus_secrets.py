"""What the connection to the broker is protected with: certificate and password."""

from __future__ import annotations

import ssl
from pathlib import Path

from platewatch.errors import SettingsError

LOCAL_HOSTS = ("127.0.0.1", "::1", "localhost")


def tls_context(ca_file: str) -> ssl.SSLContext:
    """TLS 1.2 or newer, the broker's certificate and name always checked."""
    try:
        context = ssl.create_default_context(cafile=ca_file)
    except (OSError, ssl.SSLError) as error:
        raise SettingsError(f"bus: ca_file {ca_file!r} cannot be used: {error}") from None
    context.minimum_version = ssl.TLSVersion.TLSv1_2
    return context


def read_secret(secret_file: str) -> str:
    """The password: the file's first line.  Others must not be able to read it."""
    path = Path(secret_file)
    try:
        mode = path.stat().st_mode
        lines = path.read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise SettingsError(f"bus: secret_file {secret_file!r} cannot be read: {error}") from None
    if mode & 0o077:
        raise SettingsError(
            f"bus: secret_file {secret_file!r} is open to other users; chmod 600 {secret_file}"
        )
    if not lines or not lines[0].strip():
        raise SettingsError(f"bus: secret_file {secret_file!r} is empty; put the password into it")
    return lines[0].strip()


def password_of(
    user: str, secret_file: str, host: str, tls: ssl.SSLContext | None, plain: bool
) -> str | None:
    """The user's password; never to another machine in clear, unless `plain` allows it."""
    if tls is None and host not in LOCAL_HOSTS and not plain:
        raise SettingsError(
            f"bus: the password of {user!r} would travel to {host} unencrypted; "
            "name the broker's ca_file"
        )
    return read_secret(secret_file) if secret_file else None
