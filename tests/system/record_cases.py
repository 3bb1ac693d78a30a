"""A small journal as the daemon writes one: two frames, a change of specimen, facts of the host between."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from daq import settings
from daq.core.rules import rules_to_json
from daq.engine import Engine
from daq.records import (
    BAD,
    TICKS_PER_S,
    ClockStepped,
    ConditionChanged,
    EngineStarted,
    EntryMade,
    Fact,
    RulesAdopted,
    ScansTaken,
    Stamp,
)
from daq.store.journal import Journal
from daq.store.rows import Batch

EVERY = 180 * TICKS_PER_S
EPOCH = 1_767_225_600 * TICKS_PER_S  # 2026-01-01
LAB = """\
site: hall-a
journal: {journal}
frames:
  H1:
    specimen: {{id: {specimen}, extensometer_length_mm: 25.0, diameter_mm: 6.0}}
    stress_mpa: 200
    loading: constant_load
    temperature_c: 980
    tolerance: iso204
    expected_rupture_h: 400
    starts: first_scan
    channels: &channels
      left: {{role: strain, side: A}}
      right: {{role: strain, side: B}}
      mid: {{role: specimen_temperature}}
  H2:
    specimen: {{id: T-9, extensometer_length_mm: 25.0, diameter_mm: 6.0}}
    stress_mpa: 150
    loading: constant_load
    temperature_c: 980
    tolerance: iso204
    starts: first_scan
    channels: *channels
"""


@contextmanager
def quick_folder() -> Iterator[Path]:
    """A folder in memory where the system has one: an fsync there costs nothing."""
    memory = Path("/dev/shm")
    with tempfile.TemporaryDirectory(dir=memory if os.access(memory, os.W_OK) else None) as name:
        yield Path(name)


def lab_file(folder: Path, journal: str, specimen: str) -> Path:
    folder.mkdir(parents=True, exist_ok=True)
    path = folder / f"{specimen}.yaml"
    path.write_text(LAB.format(journal=journal, specimen=specimen))
    return path


def rules(folder: Path, specimen: str, frame: str) -> RulesAdopted:
    lab = settings.load(lab_file(folder, "j", specimen))
    test = next(t for f in lab.frames for t in f.tests if f.name == frame)
    return RulesAdopted(stamp(0), frame, test.test, rules_to_json(test))


def stamp(number: int) -> Stamp:
    tick = EPOCH + number * EVERY
    return Stamp(tick, tick - EPOCH + 77, "boot-1")


def scans(frame: str, number: int, n: int, since: int = 0) -> ScansTaken:
    """A creep curve, scan after scan [invented]: strain as a person could draw it, noise, a hot hour."""
    k = np.arange(number, number + n, dtype=np.int64)
    hours = (k - since) / 20.0
    noise = np.random.default_rng(number + len(frame)).normal(0.0, 2e-6, (n, 2))
    strain = 0.003 * (1.0 - np.exp(-hours / 3.0)) + 2e-4 * hours
    mid = 980.0 + 9.0 * ((hours > 2.0) & (hours < 3.0))
    values = np.round(np.column_stack([strain + noise[:, 0], strain + noise[:, 1], mid]), 7)
    quality = np.zeros((n, 3), np.uint8)
    if number == 40:
        values[0, 0], quality[0, 0] = np.nan, BAD
    tick = EPOCH + k * EVERY
    return ScansTaken(frame, ("left", "right", "mid"), "boot-1", tick, tick - EPOCH + 77, values, quality)


def started(number: int) -> EngineStarted:
    return EngineStarted(stamp(number), "0.1.0", stamp(number).utc_tick - 1)


def facts(folder: Path) -> Iterator[Fact]:
    """Yield 10 hours of H1 with S-1, then 5 with S-2, 5 of H2 beside it; facts of the host between them."""
    yield EngineStarted(stamp(0), "0.0.9", None)
    yield rules(folder, "S-1", "H1")
    yield rules(folder, "S-1", "H2")
    for number in range(0, 300, 20):
        if number == 60:
            yield ConditionChanged(stamp(number), "", "gauge", "link_lost", True, "no answer")
            yield ConditionChanged(stamp(number), "", "gauge", "link_lost", False, "")
        if number == 100:
            yield ClockStepped(stamp(number), -30 * TICKS_PER_S)
            yield EntryMade(stamp(number), "H1", "note", "mk", {}, "looked at it")
        if number == 200:
            yield RulesAdopted(stamp(number), "H1", "H1", rules(folder, "S-2", "H1").rules)
        yield scans("H1", number, 20, 200 if number >= 200 else 0)
        if number < 100:
            yield scans("H2", number, 20)
    yield EngineStarted(stamp(300), "0.1.0", stamp(299).utc_tick)


def write_journal(folder: Path, lab: Path, seal_until: int = 32) -> Engine:
    """Write the journal to ``folder`` as the daemon does, whole chunks sealed; return the engine."""
    engine = Engine()
    with Journal.open(folder, site="hall-a") as journal:
        for k, fact in enumerate(facts(lab)):
            journal.commit(Batch(facts=(fact,), findings=tuple(engine.take(fact))))
            if k < seal_until and k % 3 == 0:
                for frame in (*journal.frames(), ""):
                    journal.seal(frame)
    return engine
