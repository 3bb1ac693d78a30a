"""What a walk through a journal has looked at: per chunk and per test, sound or not.

A test is told by the first rules of its specimen in its place (a fact), and lasts until the rules
of another specimen come there. Chunks belong to a frame: two tests that followed each other may share one.
"""

from __future__ import annotations

import json
from collections.abc import Iterable
from dataclasses import dataclass, field
from operator import itemgetter

from daq.records import Fact, RulesAdopted, ScansTaken
from daq.store.chunks import Record

Ranges = list[tuple[int, int]]


@dataclass(frozen=True, slots=True)
class Part:
    """One chunk (or, with an empty ``file``, one row of the host file) that was read.

    ``chain`` is empty where the journal has sealed nothing yet: for rows, and for what an archive packed.
    """

    frame: str
    file: str
    number: int
    first: int
    last: int
    chain: bytes = b""
    sound: bool = True


@dataclass(slots=True)
class Block:
    """Scans of one frame that stand together: numbers and UTC ticks of the first and the last."""

    first: int
    last: int
    scans: int
    from_tick: int
    to_tick: int


@dataclass(frozen=True, slots=True)
class TestRun:
    """One specimen in one place: ``first`` is the number of its first rules, ``last`` None while it hangs.

    ``last`` is the number of the rules of the next specimen there, which end the test.
    """

    __test__ = False  # not a test class, whatever a collector thinks of its name

    frame: str
    test: str
    specimen: str
    first: int
    last: int | None


@dataclass(slots=True)
class Survey:
    """Filled by a walk. ``files`` are those that were opened."""

    parts: list[Part] = field(default_factory=list)
    blocks: dict[str, list[Block]] = field(default_factory=dict)
    rules: dict[int, RulesAdopted] = field(default_factory=dict)
    files: list[str] = field(default_factory=list)
    last_seq: int | None = None

    def take(self, frame: str, records: list[Record]) -> None:
        """Note the records of one chunk of ``frame``."""
        for record in records:
            if record.fact.frame == frame:
                self.note(int(record.seqs[0]), int(record.seqs[-1]), record.fact)

    def note(self, first: int, last: int, fact: Fact) -> None:
        """Note one fact that was read under the numbers ``first`` to ``last``."""
        if isinstance(fact, RulesAdopted):
            self.rules[first] = fact
        if not isinstance(fact, ScansTaken) or not len(fact):
            return
        ticks = int(fact.utc_tick.min()), int(fact.utc_tick.max())
        known = self.blocks.setdefault(fact.frame, [])
        if known and known[-1].last < first and not any(known[-1].last < s < first for s in self.rules):
            block = known[-1]
            block.last, block.scans = last, block.scans + len(fact)
            block.from_tick, block.to_tick = min(block.from_tick, ticks[0]), max(block.to_tick, ticks[1])
        else:
            known.append(Block(first, last, len(fact), *ticks))

    def tests(self) -> list[TestRun]:
        """Return the tests in the order of their first rules."""
        return tests_of(self.rules.items())

    def of(self, run: TestRun) -> tuple[list[Block], list[Part]]:
        """Return the scans and the chunks in which a test lies."""
        end = run.last if run.last is not None else 1 << 62
        blocks = [b for b in self.blocks.get(run.frame, []) if b.first <= end and b.last >= run.first]
        parts = [p for p in self.parts if p.frame == run.frame and p.first <= end and p.last >= run.first]
        return blocks, parts

    def readable(self, frame: str) -> Ranges:
        """Return the ranges of numbers in which everything of ``frame`` could be read, in order."""
        out: Ranges = []
        for part in sorted((p for p in self.parts if p.frame == frame), key=lambda p: p.first):
            if not part.sound:
                out.append((0, -1))  # ends a range
            elif out and out[-1][1] >= 0:
                out[-1] = (out[-1][0], max(part.last, out[-1][1]))
            else:
                out.append((part.first, part.last))
        return [r for r in out if r[1] >= 0]


def tests_of(rules: Iterable[tuple[int, RulesAdopted]]) -> list[TestRun]:
    """Return the tests that rules (by their number) begin and end."""
    open_runs: dict[str, TestRun] = {}
    done: list[TestRun] = []
    for seq, fact in sorted(rules, key=itemgetter(0)):
        specimen = specimen_of(fact)
        known = open_runs.get(fact.test)
        if known is not None and known.specimen == specimen:
            continue
        if known is not None:
            done.append(TestRun(known.frame, known.test, known.specimen, known.first, seq))
        open_runs[fact.test] = TestRun(fact.frame, fact.test, specimen, seq, None)
    return sorted([*done, *open_runs.values()], key=lambda r: (r.first, r.test))


def specimen_of(fact: RulesAdopted) -> str:
    """Return the specimen's name in the rules; empty where they name none."""
    try:
        return str(json.loads(fact.rules)["specimen"]["id"])
    except (ValueError, KeyError, TypeError):
        return ""
