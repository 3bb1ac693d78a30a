"""A small broker started with the program: for the bench and for tests, never for a laboratory.

Bound to 127.0.0.1, in a process of its own, everything in memory: what it knew is gone when it ends.
"""

from __future__ import annotations

import socket
import tempfile
from pathlib import Path
from typing import Any, Final

from daq.records import UpturnError

HOST: Final = "127.0.0.1"
PAYLOAD_MOST: Final = 1_048_576


class EmbeddedBrokerError(UpturnError):
    """The embedded broker is not installed, or its port is taken."""


class EmbeddedBroker:
    """MQTT 5 by default, one protocol version per listener.

    Args:
        port: 0 takes a free one.
        protocol: ``5`` or ``3.1.1``.
    """

    def __init__(self, port: int = 0, *, protocol: str = "5") -> None:
        self.port = port or _free_port()
        self.protocol = protocol
        self._folder: tempfile.TemporaryDirectory[str] | None = None
        self._broker: Any = None

    def start(self, timeout_s: float = 10.0) -> EmbeddedBroker:
        """Start it and wait until it accepts connections.

        Raises:
            EmbeddedBrokerError: the extra is missing, the port is taken, or it does not come up.
        """
        try:
            from iotcore import Broker
        except ImportError as error:
            raise EmbeddedBrokerError(
                "embedded broker: got no package iotcore, wanted it: pip install 'upturn[broker]'"
            ) from error
        self._folder = tempfile.TemporaryDirectory(prefix="upturn-broker-")
        config = Path(self._folder.name) / "broker.toml"
        config.write_text(_CONFIG.format(table="v5" if self.protocol == "5" else "v4", port=self.port))
        self._broker = Broker(config_path=str(config))
        try:
            self._broker.start(timeout_s)
        except (OSError, RuntimeError) as error:
            self.stop()
            raise EmbeddedBrokerError(f"embedded broker on {HOST}:{self.port}: {error}") from error
        return self

    def stop(self) -> None:
        """End its process. May be called twice."""
        if self._broker is not None:
            self._broker.stop()
            self._broker = None
        if self._folder is not None:
            self._folder.cleanup()
            self._folder = None

    def __enter__(self) -> EmbeddedBroker:
        return self.start()

    def __exit__(self, *exc: object) -> None:
        self.stop()


def _free_port() -> int:
    with socket.socket() as s:
        s.bind((HOST, 0))
        return int(s.getsockname()[1])


_CONFIG: Final = """\
id = 0
[router]
id = 0
max_connections = 100
max_outgoing_packet_count = 200
max_segment_size = 10485760
max_segment_count = 10
[{table}.1]
name = "loopback"
listen = "127.0.0.1:{port}"
next_connection_delay_ms = 1
    [{table}.1.connections]
    connection_timeout_ms = 60000
    max_payload_size = 1048576
    max_inflight_count = 100
    dynamic_filters = true
"""
