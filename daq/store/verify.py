"""Walk a whole journal and name every change, gap and damage in it. Nothing is written.

Four questions are asked of every stored thing: can SQLite read the page (its own integrity check); are
the bytes those that were written (checksum); do they mean what was sealed, in the order it was
sealed (content and hash chain, and the chain's value as the host file has it); and is every sequence
number from 1 to the last one there, once. A writer may be at work meanwhile.

What the checks cannot show: whoever can write here can make every one of them anew, from the changed
fact to the last chain value. Only a chain value that was noted elsewhere (on paper, in another
house's records) tells that. And what is rebuilt anyway has no check of its own: the rows ``status`` and
``inbox``, the marks of delivery of ``outbox``, the numbers that findings and messages get next, the
site's name in ``meta``.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable, Iterator
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np

from daq.codec import decode_finding
from daq.records import IntArray, RecordError
from daq.store.chunks import Chunk, Record, content_of, link, unpack
from daq.store.errors import JournalDamaged, JournalError, explain
from daq.store.lock import marked
from daq.store.reader import open_host_to_read
from daq.store.reading import tail_fact
from daq.store.recovery import QUARANTINE
from daq.store.rows import checksum
from daq.store.schema import APPLICATION_ID, HOST_FILE, MIGRATIONS, transaction, version_of
from daq.store.segments import (
    FOLDER,
    TABLES,
    UnfinishedError,
    about_is_sound,
    about_of,
    load,
    open_to_read,
    origin_of,
    sealed_to_of,
)
from daq.store.survey import Part, Survey

DAMAGE: Final = "damage"
GAP: Final = "gap"
NOTE: Final = "note"


@dataclass(frozen=True, slots=True)
class Trouble:
    """One thing that is not as it was written.

    ``kind``: ``damage`` (bytes differ, cannot be read, or are missing where something names them),
    ``gap`` (a sequence number is missing), ``note`` (known and explained; the record itself is sound).
    ``file`` is the file's name, ``frame`` whose facts are concerned where that is known ("" for the
    host's own), ``first`` to ``last`` their numbers; None where the trouble is not about certain facts.
    """

    kind: str
    place: str
    got: str
    wanted: str
    file: str = ""
    frame: str | None = None
    first: int | None = None
    last: int | None = None

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
    survey: Survey = field(default_factory=Survey)


def verify(folder: Path, survey: Survey | None = None) -> Iterator[Trouble]:
    """Yield everything that is wrong with the journal in ``folder``; nothing where all is sound.

    Args:
        survey: Filled with what was looked at.

    Raises:
        JournalError: there is no journal there, or one of a later version of this program.
    """
    seen = _Seen(survey=survey if survey is not None else Survey())
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
        _miss(path.name, seen)
    yield from _verify_numbers(host, seen)
    aside = folder / QUARANTINE
    for path in sorted(aside.iterdir()) if aside.exists() else ():
        yield Trouble(NOTE, str(path), "a damaged host file that was put aside", "nothing; keep it")


def verify_sealed(path: Path, survey: Survey | None = None) -> Iterator[Trouble]:
    """Yield everything that is wrong with one sealed file by itself, without the journal it came from."""
    seen = _Seen(survey=survey if survey is not None else Survey())
    yield from _guarded(path, _walk_file(path, {}, seen, alone=True))


def _miss(file: str, seen: _Seen) -> None:
    """Note the chunks that the host file names in ``file`` and that the walk did not come to."""
    met = {(p.file, p.number) for p in seen.survey.parts if p.file == file}
    for n in seen.named:
        if n.file == file and (file, n.number) not in met:
            seen.survey.parts.append(Part(n.frame, n.file, n.number, n.first, n.last, n.chain, sound=False))


def _guarded(path: Path, troubles: Iterator[Trouble]) -> Iterator[Trouble]:
    """Turn an unreadable file into a trouble, so that the walk goes on with the next one."""
    try:
        yield from troubles
    except JournalDamaged as error:
        yield Trouble(DAMAGE, str(path), str(error), "an undamaged file", path.name)
    except (TypeError, ValueError, KeyError, AttributeError, IndexError, OverflowError) as error:
        # a value of another kind than was written there: the text of a table's form was changed, say
        yield Trouble(DAMAGE, str(path), repr(error), "values of the kind that was written", path.name)
    except (sqlite3.Error, OSError) as error:
        wanted = "a file that can be read to its end"
        yield Trouble(DAMAGE, str(path), str(explain(error, "reading")), wanted, path.name)


# --- the host file --------------------------------------------------------------------------


def _verify_host(host: Path, seen: _Seen) -> Iterator[Trouble]:
    mark = marked(host.parent)  # before the file is looked at: a writer may be at work
    with closing(open_host_to_read(host)) as connection:
        seen.survey.files.append(host.name)
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
                    f"{APPLICATION_ID:#x}, {meta.get('schema')}", host.name,
                )  # fmt: skip
            if missing := sorted({"journal", "site", "schema"} - meta.keys()):
                yield Trouble(DAMAGE, f"{host} meta", f"no {', '.join(missing)}", "all of them", host.name)
            yield from _forms(connection, host, (s for made in MIGRATIONS[:version] for s in made))
            (seen.last,) = connection.execute("SELECT last_seq FROM head").fetchone()
            seen.survey.last_seq = seen.last
            if mark is not None and mark.journal == seen.journal and mark.last_seq > (seen.last or 0):
                yield Trouble(
                    DAMAGE, str(host), f"facts up to {seen.last}",
                    f"up to {mark.last_seq}, which were acknowledged (the write-ahead file is gone or cut)",
                    host.name, None, (seen.last or 0) + 1, mark.last_seq,
                )  # fmt: skip
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
            yield Trouble(DAMAGE, str(path), complaint, "pages that hold together", path.name)


def _forms(connection: sqlite3.Connection, path: Path, statements: Iterable[str]) -> Iterator[Trouble]:
    """Compare the tables' own description, which SQLite takes as it stands, with that of this format."""
    rows = connection.execute(
        "SELECT sql FROM sqlite_schema WHERE sql NOT NULL AND name NOT LIKE 'sqlite_stat%'"
    )
    there = {" ".join(str(sql).split()) for (sql,) in rows}
    wanted = {" ".join(s.split()) for s in statements if s.startswith("CREATE")}
    if any("AUTOINCREMENT" in s for s in wanted):
        wanted.add("CREATE TABLE sqlite_sequence(name,seq)")  # SQLite's own, for the numbers given last
    if there != wanted:
        got, meant = sorted(there - wanted), sorted(wanted - there)
        yield Trouble(DAMAGE, f"{path} form of the tables", f"{got}", f"{meant}", path.name)


def _verify_tail(connection: sqlite3.Connection, host: Path, seen: _Seen) -> Iterator[Trouble]:
    for row in connection.execute("SELECT seq, frame, kind, checksum, data FROM tail"):
        seq, frame, kind = row[:3]
        place = f"{host} fact {seq}"
        try:
            fact = tail_fact(row, f"{host} fact")
        except JournalDamaged as damage:
            seen.survey.parts.append(Part(frame, "", 0, seq, seq, sound=False))
            yield Trouble(
                DAMAGE, place, str(damage), "the bytes that were committed", host.name, frame, seq, seq
            )
            continue
        finally:
            seen.tail.add(seq)
        seen.survey.parts.append(Part(frame, "", 0, seq, seq))
        seen.survey.note(seq, seq, fact)
        if (fact.frame, type(fact).__name__) != (frame, kind):
            yield Trouble(
                DAMAGE, place, f"{type(fact).__name__} of {fact.frame!r}", f"{kind} of {frame!r}",
                host.name, frame, seq, seq,
            )  # fmt: skip


def _verify_rest(connection: sqlite3.Connection, host: Path) -> Iterator[Trouble]:
    for seq, name, test, kind, check, body in connection.execute(
        "SELECT seq, id, test, kind, checksum, body FROM finding"
    ):
        good = isinstance(body, str) and check == checksum(body.encode(), name)
        if good:
            f = decode_finding(body)
            good = (f.id, f.frame, f.kind) == (name, test, kind)
        if not good:
            yield Trouble(
                DAMAGE, f"{host} finding {seq} ({name})", "other text", "what was committed", host.name
            )
    rows: Iterator[Any] = connection.execute(
        "SELECT seq, checksum, payload, id, topic, retain, expires_s FROM outbox"
    )
    for seq, check, payload, *about in rows:
        if not isinstance(payload, bytes) or check != checksum(payload, *about):
            yield Trouble(DAMAGE, f"{host} outbox row {seq}", "other bytes", "what was committed", host.name)
    for key, seq, engine, check, data in connection.execute(
        "SELECT key, seq, engine, checksum, data FROM snapshot"
    ):
        if not isinstance(data, bytes) or check != checksum(data, key, seq, engine):
            place = f"{host} snapshot of {key} at {seq}"
            yield Trouble(DAMAGE, place, "other bytes", "what was committed", host.name)


# --- sealed files ---------------------------------------------------------------------------


def _verify_sealed(path: Path, seen: _Seen) -> Iterator[Trouble]:
    named = {n.number: n for n in seen.named if n.file == path.name}
    if not path.exists():
        facts = sum(n.facts for n in named.values())
        wanted = f"{len(named)} chunks with {facts} facts"
        first = min(n.first for n in named.values())
        last = max(n.last for n in named.values())
        frame = next(iter(named.values())).frame
        yield Trouble(DAMAGE, str(path), "no such file", wanted, path.name, frame, first, last)
        return
    try:
        yield from _walk_file(path, named, seen, alone=False)
    except UnfinishedError:
        kind, wanted = (DAMAGE, f"{len(named)} chunks") if named else (NOTE, "nothing; it can stay")
        yield Trouble(kind, str(path), "a file that was begun and holds nothing", wanted, path.name)


def _walk_file(path: Path, named: dict[int, _Named], seen: _Seen, *, alone: bool) -> Iterator[Trouble]:
    with closing(open_to_read(path)) as connection:
        yield from _integrity(connection, path)
        about = about_of(connection, path)
        frame = about["frame"]
        seen.survey.files.append(path.name)
        (program,) = connection.execute("PRAGMA application_id").fetchone()
        if program != APPLICATION_ID:
            got, wanted = f"program {program:#x}", f"{APPLICATION_ID:#x}"
            yield Trouble(DAMAGE, f"{path} header", got, wanted, path.name, frame)
        yield from _forms(connection, path, TABLES)
        if not about_is_sound(about):
            yield Trouble(DAMAGE, f"{path} about", "other text", "what was written", path.name, frame)
        if seen.journal is not None and about["journal"] != seen.journal:
            yield Trouble(
                DAMAGE, str(path), f"journal {about['journal']}", f"{seen.journal}, as its host file",
                path.name, frame,
            )  # fmt: skip
            return
        ends = {
            row[0]: row[1:] for row in connection.execute("SELECT number, first_seq, last_seq FROM chunk")
        }
        begin, origin = origin_of(about)
        previous: bytes | None = origin
        last = 0
        expected = begin
        for number in sorted({*ends, *named}):
            if number != expected:
                got, wanted = f"none, next is {number}", "every number once"
                yield Trouble(DAMAGE, f"{path} chunk {expected}", got, wanted, path.name, frame)
                previous = None
            expected = number + 1
            place = f"{path} chunk {number}"
            entry = named.get(number)
            first, end = (entry.first, entry.last) if entry else ends.get(number, (None, None))
            try:
                chunk = load(connection, number, frame, path)
                (chain,) = connection.execute(
                    "SELECT chain FROM chunk WHERE number = ?", (number,)
                ).fetchone()
            except (JournalDamaged, sqlite3.DatabaseError) as error:
                yield Trouble(
                    DAMAGE, place, str(error), "the chunk that was sealed", path.name, frame, first, end
                )
                if entry is not None or alone:
                    seen.survey.parts.append(
                        Part(frame, path.name, number, first or last + 1, end or last + 1, sound=False)
                    )
                previous = None if entry is None else entry.chain
                continue
            troubles: list[tuple[str, str]] = []
            try:
                records = unpack(chunk)
            except RecordError as error:
                troubles.append((str(error), "facts that can be read"))
                records = []
            troubles += _check_chunk(chunk, records, last)
            if previous is not None and chain != link(previous, number, chunk):
                troubles.append(("a chain value that does not follow", "an unbroken chain"))
            if not alone:
                troubles += _compare(chunk, records, chain, entry, seen)
            yield from (
                Trouble(DAMAGE, place, got, wanted, path.name, frame, first, end) for got, wanted in troubles
            )
            if entry is not None or alone:
                # of a chunk that was packed for an archive only, the journal will never have that hash
                kept = chain if number <= sealed_to_of(about) else b""
                part = Part(frame, path.name, number, chunk.first_seq, chunk.last_seq, kept, not troubles)
                seen.survey.parts.append(part)
                seen.survey.take(frame, records)
            previous, last = chain, chunk.last_seq


def _check_chunk(chunk: Chunk, records: list[Record], last: int) -> Iterator[tuple[str, str]]:
    """Check what a chunk says against what it holds; yield (got, wanted)."""
    if not records:
        return
    if content_of(records) != chunk.content:
        yield "other content", "what was sealed"
    seqs = np.concatenate([r.seqs for r in records])
    if (
        (seqs[0], seqs[-1]) != (chunk.first_seq, chunk.last_seq)
        or (np.diff(seqs) < 1).any()
        or seqs[0] <= last
    ):
        yield (
            f"numbers {seqs[0]} to {seqs[-1]} after {last}",
            f"{chunk.first_seq} to {chunk.last_seq}, each once",
        )


def _compare(
    chunk: Chunk, records: list[Record], chain: bytes, entry: _Named | None, seen: _Seen
) -> Iterator[tuple[str, str]]:
    """Compare a chunk with what the host file says about it, and note its numbers; yield (got, wanted)."""
    own = [r.seqs for r in records if r.fact.frame == chunk.frame]
    if entry is None:
        # written by a seal that was killed, or that runs now: its rows are in the host file still, or newer
        numbers = {int(s) for seqs in own for s in seqs if seen.last is not None and s <= seen.last}
        if not numbers <= seen.tail:
            yield "a chunk that the host file does not name", "none, or its rows there"
        return
    seen.sealed += own
    told = (entry.frame, entry.first, entry.last, entry.facts, entry.scans, entry.chain)
    holds = (chunk.frame, chunk.first_seq, chunk.last_seq, chunk.facts, chunk.scans, chain)
    if told != holds:
        yield (
            f"{holds[:5]}, chain {chain.hex()}",
            f"{told[:5]}, chain {entry.chain.hex()} as in {HOST_FILE}",
        )


# --- sequence numbers -----------------------------------------------------------------------


def _verify_numbers(host: Path, seen: _Seen) -> Iterator[Trouble]:
    """Check that every number from 1 to the last one is there, once."""
    every = np.concatenate([np.array(sorted(seen.tail), np.int64), *seen.sealed])
    every.sort()
    twice = np.unique(every[1:][np.diff(every) == 0])
    for a, b in _runs(twice):
        yield Trouble(DAMAGE, f"{host} facts {a}-{b}", "two of each", "one", host.name, None, a, b)
    last = seen.last if seen.last is not None else int(every[-1]) if every.size else 0
    if every.size and every[-1] > last:
        wanted = f"none above the last one, {last}"
        yield Trouble(DAMAGE, str(host), f"fact {every[-1]}", wanted, host.name)
    for first, end, why in seen.gaps:
        place = f"{host} facts {first}-{end}"
        yield Trouble(NOTE, place, "none", f"none: {why}", host.name, None, first, end)
    edges = np.unique(np.concatenate([[0], every, [last + 1]]))
    for i in np.flatnonzero(np.diff(edges) > 1):
        for a, b in _less(int(edges[i]) + 1, int(edges[i + 1]) - 1, seen.gaps):
            place = f"{host} facts {a}-{b}"
            yield Trouble(GAP, place, "none", "every number once", host.name, None, a, b)


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
