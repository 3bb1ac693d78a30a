"""Sealing: whole chunks of facts move from the host file to the sealed file of their frame or test.

The order makes it bear a kill anywhere: (1) the chunk is committed to the sealed file, synchronously;
(2) one transaction of the host file names the chunk and deletes its rows. A kill between leaves a
chunk that the host does not name; nobody reads it, and the next seal finds it, compares it with the
rows, and goes on with (2). Where it does not compare, the file is left as it is and a new part begun.

The host's own facts are copied into each frame's chunks, so that a sealed file tells the whole
story by itself; the originals stay in the host file until no frame has older rows there.
"""

from __future__ import annotations

import heapq
import re
import sqlite3
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from operator import itemgetter
from pathlib import Path
from typing import Any, Final

from daq.records import RecordError
from daq.store.chunks import Chunk, Row, fullness, pack, split, unpack
from daq.store.errors import JournalDamaged, guarded
from daq.store.reading import HOST, tail_fact
from daq.store.rows import EncodedFact
from daq.store.schema import HOST_FILE, tail_frames, transaction
from daq.store.segments import FOLDER, SealedWriter, file_name, part_name

LEADING_HOST_FACTS: Final = 100
"""At most this many facts of the host go before the first one of a chunk that follows a long pause."""


@dataclass(frozen=True, slots=True)
class Sealed:
    """One chunk that was moved: where it is now, and what it holds."""

    frame: str
    file: str
    number: int
    first_seq: int
    last_seq: int
    facts: int
    scans: int
    readings: int
    stored_bytes: int


class Sealer:
    """Seals for one journal; ``connection`` is its one writing connection."""

    def __init__(
        self,
        folder: Path,
        connection: sqlite3.Connection,
        journal: str,
        site: str,
        hook: Callable[[str], None],
        notices: list[str],
    ) -> None:
        self.folder = folder
        self.connection = connection
        self.journal = journal
        self.site = site
        self.hook = hook
        self.notices = notices
        self._place = f"{folder / HOST_FILE} tail row"
        # how full the next chunk of a frame is at most: below 1 there is no whole one, and looking
        # (which decodes every row of the frame) can be spared. Absent: not known
        self._fullness: dict[str, float] = {}

    def note(self, fact: EncodedFact) -> None:
        """Take into account a fact that was committed."""
        if fact.scans is None:
            self._fullness.pop(fact.frame, None)
        elif fact.frame in self._fullness:
            self._fullness[fact.frame] += fullness(fact.scans, 1, len(fact.data))

    def next(self, frame: str, name: str, upto: int, *, whole: bool, finish: bool) -> Sealed | None:
        """Move the next chunk of ``frame`` to the file called ``name``; None where there is none to move."""
        if whole and not finish and self._fullness.get(frame, 1.0) < 1.0:
            return None
        chunk = self._next_chunk(frame, upto, whole=whole)
        if chunk is None and not finish:
            return None
        file = self._newest_part(name)
        while True:
            try:
                return self._move(frame, file, chunk)
            except _UnusableError as error:
                self.notices.append(f"{error}; it is kept as it is, and sealing goes on in a new part")
                file = part_name(file)

    def _move(self, frame: str, file: str, chunk: Chunk | None) -> Sealed | None:
        """Write ``chunk`` to ``file`` and name it; None: there are no more, make a plain single file."""
        path = self.folder / FOLDER / file
        known = self._known(file)
        if chunk is None and known is None:
            return None
        writer = self._open(path, frame)
        try:
            orphan = self._orphan(writer, path, frame, known)
            if orphan is not None:
                self._name(frame, file, *orphan)
                return _sealed(file, orphan[0], orphan[2])
            if chunk is None:
                writer.finish()
                return None
            self.hook("seal.packed")
            try:
                number, chain = writer.append(chunk)
            except JournalDamaged as damage:
                raise _UnusableError(str(damage)) from damage
            self.hook("seal.written")
            self._name(frame, file, number, chain, chunk)
            self.hook("seal.moved")
            return _sealed(file, number, chunk)
        finally:
            writer.close()

    def _open(self, path: Path, frame: str) -> SealedWriter:
        try:
            return SealedWriter.open(path, frame=frame, journal=self.journal, site=self.site)
        except JournalDamaged as damage:
            raise _UnusableError(str(damage)) from damage

    def _known(self, file: str) -> tuple[int, bytes] | None:
        """Return number and chain of the newest chunk that the host names in ``file``."""
        row: tuple[int, bytes] | None = self.connection.execute(
            "SELECT number, chain FROM chunk WHERE file = ? ORDER BY number DESC LIMIT 1", (file,)
        ).fetchone()
        return row

    def _newest_part(self, name: str) -> str:
        first = file_name(name)
        parts = re.compile(re.escape(first.removesuffix(".sqlite")) + r"(?:\+(\d+))?\.sqlite")
        found = [
            (int(match[1] or 1), file)
            for (file,) in self.connection.execute("SELECT DISTINCT file FROM chunk")
            if (match := parts.fullmatch(file))
        ]
        return max(found, default=(1, first))[1]

    def _orphan(
        self, writer: SealedWriter, path: Path, frame: str, known: tuple[int, bytes] | None
    ) -> tuple[int, bytes, Chunk] | None:
        """Return the chunk that was written but not yet named, once it was compared with its rows."""
        try:
            there = {number: chain for number, _, _, chain in writer.numbers()}
            if known is not None and there.get(known[0]) != known[1]:
                raise _UnusableError(f"{path}: got a file without chunk {known[0]} as the journal names it")
            number = known[0] + 1 if known else 1
            if number not in there:
                return None
            chunk = writer.chunk(number)
            writer.settle()  # its rows go next
            seqs = [int(seq) for record in unpack(chunk) for seq in record.seqs]
        except (JournalDamaged, RecordError) as damage:
            raise _UnusableError(f"{path}: {damage}") from damage
        rows = [row for row in self._rows(frame, chunk.first_seq, chunk.last_seq) if row[0] in set(seqs)]
        if [row[0] for row in rows] != seqs or pack(frame, rows).content != chunk.content:
            raise _UnusableError(f"{path} chunk {number}: got other facts than the journal has")
        return number, there[number], chunk

    def _next_chunk(self, frame: str, upto: int, *, whole: bool) -> Chunk | None:
        if frame == HOST:
            upto = min(upto, self._host_limit())
        (first,) = self.connection.execute(
            "SELECT min(seq) FROM tail WHERE frame = ? AND seq <= ?", (frame, upto)
        ).fetchone()
        if first is None:
            return None
        (covered,) = self.connection.execute(
            "SELECT coalesce(max(last_seq), 0) FROM chunk WHERE frame = ?", (frame,)
        ).fetchone()
        if frame != HOST:
            leading = self.connection.execute(
                "SELECT seq FROM tail WHERE frame = '' AND seq > ? AND seq < ? ORDER BY seq DESC LIMIT ?",
                (covered, first, LEADING_HOST_FACTS),
            ).fetchall()
            first = leading[-1][0] if leading else first
        rows, full = split(self._rows(frame, first, upto), frame)
        if full < 1.0:
            self._fullness[frame] = full
        else:
            self._fullness.pop(frame, None)
        return pack(frame, rows) if rows and (full >= 1.0 or not whole) else None

    def _host_limit(self) -> int:
        """Return the number up to which no frame has rows that are still to be sealed."""
        frames = [f for f in tail_frames(self.connection) if f != HOST]
        firsts = [
            self.connection.execute("SELECT min(seq) FROM tail WHERE frame = ?", (f,)).fetchone()[0]
            for f in frames
        ]
        return int(min(firsts, default=1 << 62)) - 1

    def _rows(self, frame: str, first: int, last: int) -> Iterator[Row]:
        """Yield the rows of ``frame`` and of the host, in order."""
        streams = [self._read(name, first, last) for name in dict.fromkeys((frame, HOST))]
        return heapq.merge(*streams, key=itemgetter(0))

    def _read(self, frame: str, first: int, last: int) -> Iterator[Row]:
        rows: Iterator[Any] = self.connection.execute(
            "SELECT seq, frame, kind, checksum, data FROM tail WHERE frame = ? AND seq >= ? AND seq <= ? "
            "ORDER BY seq",
            (frame, first, last),
        )
        for row in rows:
            yield row[0], row[4], tail_fact(row, self._place)

    def _name(self, frame: str, file: str, number: int, chain: bytes, chunk: Chunk) -> None:
        """Name a chunk that is on the disk, and let its rows go, in one transaction."""
        with guarded(self.folder / HOST_FILE), transaction(self.connection):
            self.connection.execute(
                "INSERT INTO chunk (frame, last_seq, first_seq, file, number, facts, scans, chain) "
                "VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
                (frame, chunk.last_seq, chunk.first_seq, file, number, chunk.facts, chunk.scans, chain),
            )
            self.connection.execute(
                "DELETE FROM tail WHERE frame = ? AND seq BETWEEN ? AND ?",
                (frame, chunk.first_seq, chunk.last_seq),
            )


class _UnusableError(Exception):
    """This sealed file can take no more; the next part can."""


def _sealed(file: str, number: int, chunk: Chunk) -> Sealed:
    return Sealed(
        chunk.frame, file, number, chunk.first_seq, chunk.last_seq, chunk.facts, chunk.scans,
        chunk.readings, len(chunk.index) + len(chunk.data),
    )  # fmt: skip
