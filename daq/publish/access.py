"""How the broker may be reached, and what is refused.

Plain MQTT goes to this machine only; anything else is TLS with the host's name checked, and there is
no switch for less. A secret comes from a file that nobody else may read, is read anew at each
connection (so it can be changed while a test runs) and stands in no message.
"""

from __future__ import annotations

import ipaddress
import os
import ssl
import stat
from dataclasses import dataclass
from pathlib import Path
from typing import Final
from urllib.parse import urlsplit

from daq.records import UpturnError

PORTS: Final = {"mqtt": 1883, "mqtts": 8883}
PROTOCOLS: Final = ("5", "3.1.1")


class PublishError(UpturnError):
    """The broker cannot be used as the settings say; the message names place, got and wanted."""


def is_loopback(host: str) -> bool:
    """Whether ``host`` is this machine, so that nothing said to it passes a network."""
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return host == "localhost"


@dataclass(frozen=True, slots=True)
class BrokerSettings:
    """Where the broker is and how to log in.

    Args:
        tls: Checked against ``ca_file``, or the system's authorities; must be true beyond loopback.
        protocol: ``5``, or ``3.1.1``, where a forbidden topic is acknowledged like any other.
        password_file, key_file: Mode 0600 or stricter, owned by the running user or root.
        cert_file, key_file: The client's own certificate, where the broker asks for one.
        embedded: The program starts this broker itself (bench).
    """

    host: str = "127.0.0.1"
    port: int = 1883
    tls: bool = False
    protocol: str = "5"
    user: str | None = None
    password_file: Path | None = None
    ca_file: Path | None = None
    cert_file: Path | None = None
    key_file: Path | None = None
    client_id: str | None = None
    embedded: bool = False

    def __post_init__(self) -> None:
        if not self.tls and not is_loopback(self.host):
            raise PublishError(
                f"broker: got mqtt://{self.host}, wanted mqtts:// (plain is for this machine only)"
            )
        if self.protocol not in PROTOCOLS:
            raise PublishError(f"broker.protocol: got {self.protocol!r}, wanted one of {PROTOCOLS}")
        if not 0 < self.port < 65536:
            raise PublishError(f"broker.port: got {self.port}, wanted 1 to 65535")
        if self.password_file is not None and self.user is None:
            raise PublishError("broker.password_file: got no user beside it, wanted one")

    @property
    def place(self) -> str:
        """Return ``host:port`` for messages."""
        return f"[{self.host}]:{self.port}" if ":" in self.host else f"{self.host}:{self.port}"

    @property
    def url(self) -> str:
        return f"{'mqtts' if self.tls else 'mqtt'}://{self.place}"


def parse_url(url: str) -> tuple[str, int, bool]:
    """Return (host, port, tls) of ``mqtt://HOST[:PORT]`` or ``mqtts://HOST[:PORT]``.

    Raises:
        PublishError: another scheme, no host, a bad port, or a user or password inside.
    """
    try:
        parts = urlsplit(url)
        host, port = parts.hostname, parts.port
    except ValueError as error:
        raise PublishError(f"broker.url: got {url!r} ({error}), wanted mqtts://HOST:PORT") from error
    if parts.scheme not in PORTS or not host or parts.path not in ("", "/"):
        raise PublishError(f"broker.url: got {url!r}, wanted mqtts://HOST:PORT or mqtt://127.0.0.1:PORT")
    if parts.username or parts.password:
        raise PublishError("broker.url: got a user or password in it, wanted user and password_file")
    return host, port or PORTS[parts.scheme], parts.scheme == "mqtts"


def read_secret(path: Path) -> str:
    """Return the one line in ``path``.

    Raises:
        PublishError: unreadable, empty, or open to others than its owner.
    """
    check_private(path)
    try:
        text = path.read_text(encoding="utf-8").rstrip("\r\n")
    except (OSError, UnicodeDecodeError) as error:
        raise PublishError(f"{path}: got {_why(error)}, wanted a readable password file") from error
    if not text:
        raise PublishError(f"{path}: got an empty file, wanted a password")
    return text


def check_private(path: Path) -> None:
    """Refuse a secret that others may read.

    Raises:
        PublishError: no such file, not a plain file, another owner, or a mode wider than 0600.
    """
    try:
        info = path.stat()
    except OSError as error:
        raise PublishError(f"{path}: got {_why(error)}, wanted a file of mode 0600") from error
    if not stat.S_ISREG(info.st_mode):
        raise PublishError(f"{path}: got no plain file, wanted one of mode 0600")
    mode = stat.S_IMODE(info.st_mode)
    if mode & 0o077:
        raise PublishError(f"{path}: got mode {mode:04o}, wanted 0600 (chmod 600 {path})")
    if info.st_uid not in (0, os.geteuid()):
        raise PublishError(f"{path}: got owner {info.st_uid}, wanted the running user {os.geteuid()} or root")


class _ClosingSocket(ssl.SSLSocket):
    """Closes itself where the handshake fails; the client library leaves that to the collector."""

    def do_handshake(self, block: bool = False) -> None:
        try:
            super().do_handshake(block)
        except BaseException:
            self.close()
            raise


def tls_context(settings: BrokerSettings) -> ssl.SSLContext:
    """Return a context that checks chain, dates and name; TLS 1.2 or later.

    Raises:
        PublishError: a certificate or key file that cannot be used.
    """
    try:
        context = ssl.create_default_context(cafile=settings.ca_file)
    except (OSError, ssl.SSLError) as error:
        raise PublishError(f"{settings.ca_file}: got {_why(error)}, wanted PEM certificates") from error
    context.minimum_version = ssl.TLSVersion.TLSv1_2
    context.sslsocket_class = _ClosingSocket
    if settings.cert_file is not None:
        if settings.key_file is not None:
            check_private(settings.key_file)
        try:
            context.load_cert_chain(settings.cert_file, settings.key_file)
        except (OSError, ssl.SSLError) as error:
            raise PublishError(
                f"{settings.cert_file}: got {_why(error)}, wanted a certificate and its key"
            ) from error
    return context


def check_access(settings: BrokerSettings) -> None:
    """Find at the start what would fail at every connection: secrets, certificates.

    Raises:
        PublishError: see :func:`read_secret` and :func:`tls_context`.
    """
    if settings.password_file is not None:
        read_secret(settings.password_file)
    if settings.tls:
        tls_context(settings)


def _why(error: Exception) -> str:
    return getattr(error, "strerror", None) or type(error).__name__
