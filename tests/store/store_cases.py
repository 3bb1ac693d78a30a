"""Small facts and journals for the store's tests: every number tells which scan it is."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from daq.codec import encode_fact
from daq.records import EngineStarted, EntryMade, Fact, Finding, ScansTaken, Stamp
from daq.store.journal import Journal
from daq.store.rows import Batch, OutboxNew, Snapshot

CHANNELS = ("left", "right", "mid")


def scans(frame: str, first: int, n: int = 1, boot: str = "boot-1") -> ScansTaken:
    """Return ``n`` scans of three channels from scan number ``first`` on."""
    tick = np.arange(first, first + n, dtype=np.int64) * 10_000
    values = np.arange(first, first + n)[:, None] + np.array([0.0, 0.25, 0.5])
    return ScansTaken(frame, CHANNELS, boot, tick, tick + 7, values, np.zeros((n, 3), np.uint8))


def entry(frame: str, k: int) -> EntryMade:
    return EntryMade(Stamp(k, k, "boot-1"), frame, "loaded", "ab", {"k": k})


def started(k: int) -> EngineStarted:
    """Return a fact of the whole host."""
    return EngineStarted(Stamp(k, k, "boot-1"), "0.1.0", k or None)


def finding(k: int, test: str = "H1", kind: str = "stage") -> Finding:
    return Finding(f"{test}|S-1|{kind}|{k}|1", k, float(k), test, kind, {"k": k})


def as_bytes(facts: Iterable[tuple[int, Fact]]) -> list[tuple[int, bytes]]:
    return [(seq, encode_fact(f)) for seq, f in facts]


def one_by_one(facts: Iterable[tuple[int, Fact]]) -> list[bytes]:
    """Return the facts in order with every block of scans cut into single ones.

    Two readings of one record are the same exactly where these are the same.
    """
    out = []
    for _, fact in facts:
        if isinstance(fact, ScansTaken):
            out += [encode_fact(fact.cut(i, i + 1)) for i in range(len(fact))]
        else:
            out.append(encode_fact(fact))
    return out


def open_journal(folder: Path) -> Journal:
    return Journal.open(folder, site="hall-a")


@contextmanager
def quick_folder() -> Iterator[Path]:
    """A folder in memory where the system has one: an fsync there costs nothing."""
    memory = Path("/dev/shm")
    with tempfile.TemporaryDirectory(dir=memory if os.access(memory, os.W_OK) else None) as name:
        yield Path(name)


def fact_of(seq: int) -> Fact:
    if seq % 10 == 1:
        return started(seq)
    return entry("H1", seq) if seq % 10 == 5 else scans(("H1", "H2")[seq % 2], seq)


def fill(journal: Journal, n: int) -> None:
    """Commit ``n`` facts in batches of three, each batch with a finding, a message and a snapshot."""
    for _ in range(n // 3):
        first = journal.last_seq + 1
        journal.commit(
            Batch(
                facts=tuple(fact_of(first + i) for i in range(3)),
                findings=(finding(first),),
                outbox=(OutboxNew(f"m{first}", "t", b"payload"),),
                snapshots=(Snapshot("H1", None, "0.1.0", b"state" * 20),),
                inbox=(f"e{first}",),
            )
        )
