"""What a lab file comes to: frozen settings, ready for those who use them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from daq.core.rules import TestRules

if TYPE_CHECKING:  # its package loads the MQTT library, which a host without broker need not
    from daq.publish.access import BrokerSettings


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
