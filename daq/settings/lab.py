"""What a lab file comes to: frozen settings, ready for those who use them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from daq.core.rules import TestRules


@dataclass(frozen=True, slots=True)
class BrokerSettings:
    """Where alarms go. ``tls`` is True for mqtts://; ``protocol`` is ``5`` or ``3.1.1``.

    Empty ``user`` and ``client_id``: none, and one that the publisher makes up.
    ``embedded``: the program starts this broker itself, for a demonstration, on the loopback interface.
    """

    url: str
    host: str
    port: int
    tls: bool
    user: str = ""
    password_file: Path | None = None
    ca_file: Path | None = None
    protocol: str = "5"
    client_id: str = ""
    embedded: bool = False


@dataclass(frozen=True, slots=True)
class Instrument:
    """One instrument. ``options`` are what the driver is made with, ``port`` among them.

    ``emulated``: the bench plays it, and ``port`` is only known once it does.
    """

    name: str
    driver: str
    port: str
    poll_s: float
    options: Mapping[str, Any]
    emulated: bool = False


@dataclass(frozen=True, slots=True)
class Frame:
    """One frame and its tests.

    ``columns``: the channels of its scans, shared ones by name, a position's own as ``POSITION/channel``.
    ``sources``: column -> (instrument, reading), for those that have one.
    """

    name: str
    tests: tuple[TestRules, ...]
    columns: tuple[str, ...]
    sources: Mapping[str, tuple[str, str]]
    scan_every_s: float


@dataclass(frozen=True, slots=True)
class Bench:
    """Emulated instruments: how fast time runs, and what they are to play (plain JSON values)."""

    speed: float
    seed: int
    spec: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Lab:
    """A whole lab file. ``path`` is where it was read, ``text`` what stood there, ``journal`` absolute."""

    path: Path
    text: str
    site: str
    journal: Path
    broker: BrokerSettings | None
    instruments: tuple[Instrument, ...]
    frames: tuple[Frame, ...]
    bench: Bench | None
