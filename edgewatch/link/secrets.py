"""Password, certificates and keys of the MQTT session: read from files that nobody else can read."""

from __future__ import annotations

import ssl
from pathlib import Path

from edgewatch.errors import SettingsError
from edgewatch.settings import MqttSettings

OTHERS = 0o077
"""Permission bits of group and others: a secret that any of them may touch is refused."""
MOST_PASSWORD_BYTES = 65535
"""MQTT section 3.1.3.5: a password is binary data with a length of two bytes."""


def check_private(path: Path, key: str) -> None:
    """Raise ``SettingsError`` unless ``path`` is a file that only its owner may read, write or run."""
    try:
        mode = path.stat().st_mode
    except OSError as error:
        raise SettingsError(f"{key} = {str(path)!r}: cannot be read: {error.strerror or error}") from error
    if mode & OTHERS:
        raise SettingsError(
            f"{key} = {str(path)!r}: others may read it (mode {mode & 0o777:03o}); allowed is 600: chmod 600 {path}"
        )


def read_password(settings: MqttSettings, folder: Path) -> str | None:
    """Return the first line of the password file, ``None`` where none is named. Raises ``SettingsError``."""
    if not settings.password_file:
        return None
    path = folder / settings.password_file
    check_private(path, "mqtt.password_file")
    try:
        with path.open("rb") as file:
            line = file.readline(MOST_PASSWORD_BYTES + 1).rstrip(b"\r\n")
        if not line or len(line) > MOST_PASSWORD_BYTES:
            raise SettingsError(f"mqtt.password_file = {str(path)!r}: its first line holds no password")
        return line.decode("utf-8")
    except UnicodeDecodeError:
        raise SettingsError(f"mqtt.password_file = {str(path)!r}: its first line is not UTF-8") from None
    except OSError as error:
        raise SettingsError(f"mqtt.password_file = {str(path)!r}: {error.strerror or error}") from error


class _Socket(ssl.SSLSocket):
    """Closes itself when the handshake fails; paho would leave that to the garbage collector."""

    def do_handshake(self, block: bool = False) -> None:
        try:
            super().do_handshake(block)
        except OSError:
            self.close()
            raise


def make_tls(settings: MqttSettings, folder: Path) -> ssl.SSLContext | None:
    """Return a context that verifies the broker's certificate and host name; ``None`` without TLS.

    TLS 1.2 at least (RFC 8996 retires what is older). Raises ``SettingsError``.
    """
    if not settings.tls:
        return None
    try:
        context = ssl.create_default_context(cafile=str(folder / settings.ca_file) if settings.ca_file else None)
    except OSError as error:  # ssl.SSLError is one
        raise SettingsError(
            f"mqtt.ca_file = {settings.ca_file!r}: no certificates in PEM can be read from it: {error}"
        ) from error
    context.sslsocket_class = _Socket
    context.minimum_version = ssl.TLSVersion.TLSv1_2
    if settings.cert_file:
        key = folder / settings.key_file
        check_private(key, "mqtt.key_file")
        try:
            context.load_cert_chain(str(folder / settings.cert_file), str(key), password=_no_passphrase)
        except (OSError, ValueError) as error:
            raise SettingsError(
                f"mqtt.cert_file = {settings.cert_file!r}, mqtt.key_file = {settings.key_file!r}: "
                f"no certificate with its key in PEM: {error}"
            ) from error
    return context


def _no_passphrase() -> str:
    raise ValueError("the key is encrypted, and a station that starts by itself has nobody to ask")
