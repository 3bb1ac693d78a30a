"""Replay: the live engine, fed from a recording or from a journal, at full speed.

Nothing here concludes anything. Facts are made from a recording (rules first, then its
scans) or read from a journal, and given to the engine in their order; the findings come out
as they would have come out live.
"""

from __future__ import annotations

import random
import time
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

from daq.core import chain
from daq.core.rules import rules_to_json
from daq.engine import Engine
from daq.joining import joined
from daq.recording import Recording, RecordingError
from daq.records import Fact, Finding, RulesAdopted, ScansTaken, Stamp
from daq.settings import Frame
from daq.store.journal import JournalReader

Progress = Callable[[float], None]
"""Called with the share done, 0 to 1."""


@dataclass(slots=True)
class Tally:
    """What a replay went through, for its last line."""

    scans: int = 0
    readings: int = 0
    findings: int = 0
    seconds: float = 0.0
    reading_s: float = 0.0

    def say(self) -> str:
        """Return one line: how much, how long, how fast; reading the source apart."""
        core_s = max(self.seconds - self.reading_s, 1e-9)
        return (
            f"{self.scans} scans, {self.readings} readings, {self.findings} findings, {self.seconds:.2f} s: "
            f"{self.readings / core_s:,.0f} readings/s through the chain "
            f"(and {self.reading_s:.2f} s to read the source)"
        )


def check_starts(recording: Recording, frame: Frame) -> None:
    """Check that test time can begin in a recording.

    Raises:
        RecordingError: full load is a moment of the calendar, and the recording counts seconds.
    """
    for rules in frame.tests:
        if recording.time_column == "time_s" and chain.start_of(rules) is not None:
            raise RecordingError(
                f"{recording.path}: column time_s: got seconds from some origin, wanted a column time "
                f"(ISO 8601 with zone), since {rules.test} starts at {rules.starts}"
            )


def recording_facts(recording: Recording, frame: Frame) -> Iterator[Fact]:
    """Yield the facts that a recording stands for: the rules of its tests, then its scans."""
    start = Stamp(0, 0, "")
    for rules in frame.tests:
        yield RulesAdopted(start, frame.name, rules.test, rules_to_json(rules))
    yield from recording.blocks()


def journal_facts(folder: Path, frame: str | None = None) -> Iterator[Fact]:
    """Yield every fact of a journal, in order within each frame; scans in blocks."""
    reader = JournalReader(folder)
    try:
        yield from joined(fact for _, fact in reader.facts(frame=frame))
    finally:
        reader.close()


def cut_at_random(facts: Iterable[Fact], seed: int, most: int = 1000) -> Iterator[Fact]:
    """Yield the same facts with every block of scans cut anew, in pieces of 1 to ``most`` scans."""
    dice = random.Random(seed)
    for fact in facts:
        if not isinstance(fact, ScansTaken):
            yield fact
            continue
        at = 0
        while at < len(fact):
            n = 1 + int(most ** dice.random()) if dice.random() < 0.9 else 1
            yield fact.cut(at, min(at + n, len(fact)))
            at += n


def run(facts: Iterable[Fact], tally: Tally | None = None, engine: Engine | None = None) -> Iterator[Finding]:
    """Yield the findings of ``facts`` in order, then one summary for each test."""
    engine = engine or Engine()
    tally = tally or Tally()
    began = time.perf_counter()
    source = iter(facts)
    while True:
        before = time.perf_counter()
        fact = next(source, None)
        tally.reading_s += time.perf_counter() - before
        if fact is None:
            break
        if isinstance(fact, ScansTaken):
            tally.scans += len(fact)
            tally.readings += fact.values.size
        for finding in engine.take(fact):
            tally.findings += 1
            tally.seconds = time.perf_counter() - began
            yield finding
    for name, state in engine.tests.items():
        if name not in engine.quarantined:  # of a state that stands still a table would mislead
            tally.findings += 1
            yield chain.summary(state)
    tally.seconds = time.perf_counter() - began


def never_began(engine: Engine) -> Iterator[str]:
    """Yield a sentence for each test whose time never began, so that no findings are no riddle."""
    for name, state in engine.tests.items():
        if state.start is None:
            starts = chain.rules_of(state.rules).starts
            yield f"{name}: test time never began (starts: {starts}): nothing is said of strain and rate"
