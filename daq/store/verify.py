"""Walk a whole journal and name every change, gap and damage in it. Nothing is written.

Four questions are asked of every stored thing: can SQLite read the page (its own integrity check); are
the bytes those that were written (checksum); do they mean what was sealed, in the order it was
sealed (content and hash chain, and the chain's value as the host file has it); and is every sequence
number from 1 to the last one there, once. A writer may be at work meanwhile.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np

from daq.codec import decode_finding
from daq.records import IntArray, RecordError
from daq.store.chunks import Chunk, Record, content_of, link, unpack
from daq.store.errors import JournalDamaged, JournalError, explain
from daq.store.reader import open_host_to_read
from daq.store.reading import tail_fact
from daq.store.recovery import QUARANTINE
from daq.store.rows import checksum
from daq.store.schema import APPLICATION_ID, HOST_FILE, MIGRATIONS, transaction, version_of
from daq.store.segments import FOLDER, UnfinishedError, about_of, genesis_of, load, open_to_read

DAMAGE: Final = "damage"
GAP: Final = "gap"
NOTE: Final = "note"


@dataclass(frozen=True, slots=True)
class Trouble:
    """One thing that is not as it was written.

    ``kind``: ``damage`` (bytes differ, cannot be read, or are missing where something names them),
    ``gap`` (a sequence number is missing), ``note`` (known and explained; the record itself is sound).
    """

    kind: str
    place: str
    got: str
    wanted: str

    def __str__(self) -> str:
        return f"{self.place}: got {self.got}, wanted {self.wanted}"


@dataclass(frozen=True, slots=True)
class _Named:
    """One chunk as the host file names it."""

    frame: str
    first: int
    last: int
    file: str
    number: int
    facts: int
    scans: int
    chain: bytes


@dataclass(slots=True)
class _Seen:
    """What the walk has met so far."""

    last: int | None = None
    journal: str | None = None
    gaps: list[tuple[int, int, str]] = field(default_factory=list)
    named: list[_Named] = field(default_factory=list)
    tail: set[int] = field(default_factory=set)
    sealed: list[IntArray] = field(default_factory=list)


def verify(folder: Path) -> Iterator[Trouble]:
    """Yield everything that is wrong with the journal in ``folder``; nothing where all is sound.

    Raises:
        JournalError: there is no journal there, or one of a later version of this program.
    """
    seen = _Seen()
    host = folder / HOST_FILE
    if not host.exists() and not (folder / FOLDER).exists():
        raise JournalError(f"{folder}: got no {HOST_FILE}, wanted a journal")
    if host.exists():
        yield from _guarded(host, _verify_host(host, seen))
    else:
        yield Trouble(DAMAGE, str(host), "no file", "the host file beside its sealed files")
    for path in sorted(
        {*(folder / FOLDER).glob("*.sqlite"), *(folder / FOLDER / n.file for n in seen.named)}
    ):
        yield from _guarded(path, _verify_sealed(path, seen))
    yield from _verify_numbers(host, seen)
    aside = folder / QUARANTINE
    for path in sorted(aside.iterdir()) if aside.exists() else ():
        yield Trouble(NOTE, str(path), "a damaged host file that was put aside", "nothing; keep it")


def verify_sealed(path: Path) -> Iterator[Trouble]:
    """Yield everything that is wrong with one sealed file by itself, without the journal it came from."""
    yield from _guarded(path, _walk_file(path, {}, _Seen(), alone=True))


def _guarded(path: Path, troubles: Iterator[Trouble]) -> Iterator[Trouble]:
    """Turn an unreadable file into a trouble, so that the walk goes on with the next one."""
    try:
        yield from troubles
    except JournalDamaged as error:
        yield Trouble(DAMAGE, str(path), str(error), "an undamaged file")
    except (sqlite3.Error, OSError) as error:
        yield Trouble(DAMAGE, str(path), str(explain(error, "reading")), "a file that can be read to its end")


# --- the host file --------------------------------------------------------------------------


def _verify_host(host: Path, seen: _Seen) -> Iterator[Trouble]:
    with closing(open_host_to_read(host)) as connection:
        yield from _integrity(connection, host)
        version = version_of(connection)
        if version > len(MIGRATIONS):
            raise JournalError(f"{host}: got format {version}, this program reads up to {len(MIGRATIONS)}")
        with transaction(connection, "DEFERRED"):
            meta = dict(connection.execute("SELECT key, value FROM meta").fetchall())
            seen.journal = meta.get("journal")
            (program,) = connection.execute("PRAGMA application_id").fetchone()
            if program != APPLICATION_ID or meta.get("schema") != str(version):
                yield Trouble(
                    DAMAGE, f"{host} header", f"program {program:#x}, format {version}",
                    f"{APPLICATION_ID:#x}, {meta.get('schema')}",
                )  # fmt: skip
            (seen.last,) = connection.execute("SELECT last_seq FROM head").fetchone()
            seen.named = [
                _Named(*row)
                for row in connection.execute(
                    "SELECT frame, first_seq, last_seq, file, number, facts, scans, chain FROM chunk "
                    "ORDER BY file, number"
                )
            ]
            if version > 1:
                seen.gaps = connection.execute(
                    "SELECT first_seq, last_seq, why FROM gap ORDER BY first_seq"
                ).fetchall()
            yield from _verify_tail(connection, host, seen)
            yield from _verify_rest(connection, host)


def _integrity(connection: sqlite3.Connection, path: Path) -> Iterator[Trouble]:
    try:
        complaints = [row[0] for row in connection.execute("PRAGMA integrity_check(100)")]
    except sqlite3.DatabaseError as error:
        complaints = [str(error)]
    if complaints != ["ok"]:
        for complaint in complaints:
            yield Trouble(DAMAGE, str(path), complaint, "pages that hold together")


def _verify_tail(connection: sqlite3.Connection, host: Path, seen: _Seen) -> Iterator[Trouble]:
    for row in connection.execute("SELECT seq, frame, kind, checksum, data FROM tail"):
        seq, frame, kind = row[:3]
        place = f"{host} fact {seq}"
        try:
            fact = tail_fact(row, f"{host} fact")
        except JournalDamaged as damage:
            yield Trouble(DAMAGE, place, str(damage), "the bytes that were committed")
            continue
        finally:
            seen.tail.add(seq)
        if (fact.frame, type(fact).__name__) != (frame, kind):
            yield Trouble(DAMAGE, place, f"{type(fact).__name__} of {fact.frame!r}", f"{kind} of {frame!r}")


def _verify_rest(connection: sqlite3.Connection, host: Path) -> Iterator[Trouble]:
    for seq, name, test, kind, check, body in connection.execute(
        "SELECT seq, id, test, kind, checksum, body FROM finding"
    ):
        good = isinstance(body, str) and check == checksum(body.encode(), name)
        if good:
            f = decode_finding(body)
            good = (f.id, f.frame, f.kind) == (name, test, kind)
        if not good:
            yield Trouble(DAMAGE, f"{host} finding {seq} ({name})", "other text", "what was committed")
    rows: Iterator[Any] = connection.execute(
        "SELECT seq, checksum, payload, id, topic, retain, expires_s FROM outbox"
    )
    for seq, check, payload, *about in rows:
        if not isinstance(payload, bytes) or check != checksum(payload, *about):
            yield Trouble(DAMAGE, f"{host} outbox row {seq}", "other bytes", "what was committed")
    for key, seq, engine, check, data in connection.execute(
        "SELECT key, seq, engine, checksum, data FROM snapshot"
    ):
        if not isinstance(data, bytes) or check != checksum(data, key, seq, engine):
            yield Trouble(DAMAGE, f"{host} snapshot of {key} at {seq}", "other bytes", "what was committed")


# --- sealed files ---------------------------------------------------------------------------


def _verify_sealed(path: Path, seen: _Seen) -> Iterator[Trouble]:
    named = {n.number: n for n in seen.named if n.file == path.name}
    if not path.exists():
        facts = sum(n.facts for n in named.values())
        yield Trouble(DAMAGE, str(path), "no such file", f"{len(named)} chunks with {facts} facts")
        return
    try:
        yield from _walk_file(path, named, seen, alone=False)
    except UnfinishedError:
        kind, wanted = (DAMAGE, f"{len(named)} chunks") if named else (NOTE, "nothing; it can stay")
        yield Trouble(kind, str(path), "a file that was begun and holds nothing", wanted)


def _walk_file(path: Path, named: dict[int, _Named], seen: _Seen, *, alone: bool) -> Iterator[Trouble]:
    with closing(open_to_read(path)) as connection:
        yield from _integrity(connection, path)
        about = about_of(connection, path)
        frame = about["frame"]
        if seen.journal is not None and about["journal"] != seen.journal:
            yield Trouble(
                DAMAGE, str(path), f"journal {about['journal']}", f"{seen.journal}, as its host file"
            )
            return
        there = [row[0] for row in connection.execute("SELECT number FROM chunk ORDER BY number")]
        previous: bytes | None = genesis_of(about)
        last = 0
        for number in range(1, max([0, *there, *named]) + 1):
            place = f"{path} chunk {number}"
            entry = named.get(number)
            try:
                chunk = load(connection, number, frame, path)
                (chain,) = connection.execute(
                    "SELECT chain FROM chunk WHERE number = ?", (number,)
                ).fetchone()
            except (JournalDamaged, sqlite3.DatabaseError) as error:
                yield Trouble(DAMAGE, place, str(error), "the chunk that was sealed")
                previous = None if entry is None else entry.chain
                continue
            try:
                records = unpack(chunk)
            except RecordError as error:
                yield Trouble(DAMAGE, place, str(error), "facts that can be read")
                records = []
            yield from _verify_chunk(place, chunk, records, last)
            if previous is not None and chain != link(previous, number, chunk):
                yield Trouble(DAMAGE, place, "a chain value that does not follow", "an unbroken chain")
            if not alone:
                yield from _compare(place, chunk, records, chain, entry, seen)
            previous, last = chain, chunk.last_seq


def _verify_chunk(place: str, chunk: Chunk, records: list[Record], last: int) -> Iterator[Trouble]:
    """Check what a chunk says against what it holds."""
    if not records:
        return
    if content_of(records) != chunk.content:
        yield Trouble(DAMAGE, place, "other content", "what was sealed")
    seqs = np.concatenate([r.seqs for r in records])
    if (
        (seqs[0], seqs[-1]) != (chunk.first_seq, chunk.last_seq)
        or (np.diff(seqs) < 1).any()
        or seqs[0] <= last
    ):
        yield Trouble(
            DAMAGE, place, f"numbers {seqs[0]} to {seqs[-1]} after {last}",
            f"{chunk.first_seq} to {chunk.last_seq}, each once",
        )  # fmt: skip


def _compare(
    place: str, chunk: Chunk, records: list[Record], chain: bytes, entry: _Named | None, seen: _Seen
) -> Iterator[Trouble]:
    """Compare a chunk with what the host file says about it, and note its numbers."""
    own = [r.seqs for r in records if r.fact.frame == chunk.frame]
    if entry is None:
        # written by a seal that was killed, or that runs now: its rows are in the host file still, or newer
        numbers = {int(s) for seqs in own for s in seqs if seen.last is not None and s <= seen.last}
        if not numbers <= seen.tail:
            yield Trouble(
                DAMAGE, place, "a chunk that the host file does not name", "none, or its rows there"
            )
        return
    seen.sealed += own
    told = (entry.frame, entry.first, entry.last, entry.facts, entry.scans, entry.chain)
    holds = (chunk.frame, chunk.first_seq, chunk.last_seq, chunk.facts, chunk.scans, chain)
    if told != holds:
        yield Trouble(
            DAMAGE, place, f"{holds[:5]}, chain {chain.hex()[:12]}",
            f"{told[:5]}, chain {entry.chain.hex()[:12]} as in the host file",
        )  # fmt: skip


# --- sequence numbers -----------------------------------------------------------------------


def _verify_numbers(host: Path, seen: _Seen) -> Iterator[Trouble]:
    """Check that every number from 1 to the last one is there, once."""
    every = np.concatenate([np.array(sorted(seen.tail), np.int64), *seen.sealed])
    every.sort()
    twice = np.unique(every[1:][np.diff(every) == 0])
    for a, b in _runs(twice):
        yield Trouble(DAMAGE, f"{host} facts {a}-{b}", "two of each", "one")
    last = seen.last if seen.last is not None else int(every[-1]) if every.size else 0
    if every.size and every[-1] > last:
        yield Trouble(DAMAGE, str(host), f"fact {every[-1]}", f"none above the last one, {last}")
    for first, end, why in seen.gaps:
        yield Trouble(NOTE, f"{host} facts {first}-{end}", "none", f"none: {why}")
    edges = np.unique(np.concatenate([[0], every, [last + 1]]))
    for i in np.flatnonzero(np.diff(edges) > 1):
        for a, b in _less(int(edges[i]) + 1, int(edges[i + 1]) - 1, seen.gaps):
            yield Trouble(GAP, f"{host} facts {a}-{b}", "none", "every number once")


def _runs(numbers: IntArray) -> Iterator[tuple[int, int]]:
    if numbers.size:
        for run in np.split(numbers, np.flatnonzero(np.diff(numbers) > 1) + 1):
            yield int(run[0]), int(run[-1])


def _less(low: int, high: int, known: list[tuple[int, int, str]]) -> Iterator[tuple[int, int]]:
    """Yield what is left of ``low`` to ``high`` without the known ranges (in order)."""
    for first, last, _ in known:
        if last < low or first > high:
            continue
        if first > low:
            yield low, first - 1
        low = last + 1
    if low <= high:
        yield low, high
