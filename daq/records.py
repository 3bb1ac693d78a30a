"""The vocabulary of the house: facts, findings, and the codes of a reading's quality.

A *fact* is something that happened (scans were taken, a person made an entry, a link was
lost). Facts are journalled and never changed. A *finding* is something concluded from
facts (a stage, a milestone, an alarm transition). Findings can always be rebuilt.

Time is counted in ticks of 0.1 ms (:data:`TICKS_PER_S`), as integers, so that a stamp
that went to disk and came back is the same stamp to the last bit.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntEnum
from typing import Any, Final

import numpy as np
import numpy.typing as npt

TICKS_PER_S: Final = 10_000
"""Resolution of every stamp: 0.1 ms."""

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
ByteArray = npt.NDArray[np.uint8]


class UpturnError(Exception):
    """Root of every error that the ``daq`` package raises on purpose."""


class CoreError(UpturnError):
    """A promise inside the program was broken; the test is quarantined."""


class RecordError(UpturnError):
    """Stored bytes do not hold what they should; the message names place, got and wanted."""


class Quality(IntEnum):
    """What a reading is worth: 0 good, 1 to 63 suspect, 64 and above bad.

    A bad reading carries no number that a fit may use; a suspect one does, with doubt.
    """

    GOOD = 0
    SUSPECT_STUCK = 1
    SUSPECT_RANGE = 2
    SUSPECT_SPIKE = 3
    SUSPECT_SIDES = 4
    SUSPECT_SENSOR = 5
    SUSPECT_TIME = 6
    BAD_MISSING = 64
    BAD_LINK = 65
    BAD_GARBLED = 66
    BAD_OVERLOAD = 67
    BAD_NOT_A_NUMBER = 68
    BAD_OPEN_CIRCUIT = 69
    BAD_RANGE = 70
    BAD_IDENTITY = 71


BAD: Final = 64
"""The least code of a bad reading."""


@dataclass(frozen=True, slots=True)
class Stamp:
    """One instant.

    ``utc_tick`` is for people (ticks since 1970, or since any origin in a recording).
    ``boot_tick`` counts from the boot named by ``boot_id`` and is what intervals are made
    of. A recording knows no boot: its ``boot_id`` is empty and both counts are equal.
    """

    utc_tick: int
    boot_tick: int
    boot_id: str = ""


@dataclass(frozen=True, slots=True)
class ScansTaken:
    """A block of scans of one frame: n instants, c channels.

    Shapes: ``utc_tick`` and ``boot_tick`` (n,) int64; ``values`` (n, c) float64, the raw
    number as the instrument gave it (NaN where there is none); ``quality`` (n, c) uint8 of
    :class:`Quality`. Columns are in the order of ``channels``. Stamps may repeat or be
    slightly unordered: real records have both.
    """

    frame: str
    channels: tuple[str, ...]
    boot_id: str
    utc_tick: IntArray
    boot_tick: IntArray
    values: FloatArray
    quality: ByteArray

    def __len__(self) -> int:
        return int(self.utc_tick.shape[0])

    def cut(self, start: int, stop: int) -> ScansTaken:
        """Return scans ``start`` to ``stop`` as a block of their own (views, no copy)."""
        s = slice(start, stop)
        return ScansTaken(
            self.frame, self.channels, self.boot_id,
            self.utc_tick[s], self.boot_tick[s], self.values[s], self.quality[s],
        )  # fmt: skip


@dataclass(frozen=True, slots=True)
class BurstTaken:
    """Full-rate readings around an event, from a memory ring that a replay cannot have.

    Read only for the instant of rupture and for display, never by the estimator.
    """

    scans: ScansTaken
    why: str

    @property
    def frame(self) -> str:
        return self.scans.frame


@dataclass(frozen=True, slots=True)
class EntryMade:
    """What a person told the daemon: ``loaded``, ``ended``, ``acknowledge``, ...

    ``values`` are plain JSON values; ``initials`` say who.
    """

    stamp: Stamp
    frame: str
    entry: str
    initials: str
    values: Mapping[str, Any] = field(default_factory=dict)
    note: str = ""


@dataclass(frozen=True, slots=True)
class RulesAdopted:
    """The rules of one test as canonical JSON text (``core.rules``), in force from here on.

    ``test`` is ``FRAME`` or ``FRAME/POSITION``. The first one of a test begins it.
    """

    stamp: Stamp
    frame: str
    test: str
    rules: str
    retroactive: bool = False


@dataclass(frozen=True, slots=True)
class EngineStarted:
    """A daemon began to write: its version, and when the record before it ended.

    ``previous_tick`` is the UTC tick of the last fact before, or None in a new journal.
    ``frame`` is empty: the fact concerns the whole host.
    """

    stamp: Stamp
    version: str
    previous_tick: int | None = None
    frame: str = ""


@dataclass(frozen=True, slots=True)
class ConditionChanged:
    """Something about the installation began or ended to be so.

    ``condition`` is one of the names in ``core.alarms`` (link_lost, identity_wrong,
    disk_full, publisher_down, ...), ``subject`` what it concerns (an instrument, the
    broker). ``frame`` is empty where it concerns the whole host.
    """

    stamp: Stamp
    frame: str
    subject: str
    condition: str
    active: bool
    message: str = ""


@dataclass(frozen=True, slots=True)
class ClockStepped:
    """The UTC clock was set by ``by_ticks`` against the boot clock."""

    stamp: Stamp
    by_ticks: int
    frame: str = ""


@dataclass(frozen=True, slots=True)
class Ticked:
    """Time passed: journalled only where nothing else arrived before a deadline."""

    stamp: Stamp
    frame: str


Fact = (
    ScansTaken
    | BurstTaken
    | EntryMade
    | RulesAdopted
    | EngineStarted
    | ConditionChanged
    | ClockStepped
    | Ticked
)


@dataclass(frozen=True, slots=True)
class Finding:
    """One conclusion about one test.

    ``id`` is deterministic: ``FRAME[/POSITION]|SPECIMEN|KIND|KEY|COUNT``. It depends on what was
    concluded, never on how the scans were cut into blocks, on the engine's run, or on
    the wall clock, so that a restart, a replay and a second delivery all say the same.
    ``at_tick`` is the UTC tick of the scan or deadline that brought it; ``test_h`` hours
    since full load. ``fields`` are plain JSON values as DESIGN names them per kind.
    """

    id: str
    at_tick: int
    test_h: float | None
    frame: str
    kind: str
    fields: Mapping[str, Any]
