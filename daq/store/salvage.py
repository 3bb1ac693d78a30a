"""Carry what is sound from a damaged host file into a fresh one.

Every row stands alone: it is taken where it can be read and its checksum is right, under the number
it had. A page that cannot be read costs the rows on it: the range of numbers is halved until
the readable ones on either side are found. What the sealed files hold is taken from themselves.
"""

from __future__ import annotations

import sqlite3
from collections import Counter, deque
from collections.abc import Iterator
from contextlib import closing, suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Final

import numpy as np

from daq.records import IntArray
from daq.store.errors import JournalDamaged, JournalError
from daq.store.lock import Mark
from daq.store.reading import HOST, check_tail
from daq.store.rows import checksum
from daq.store.schema import HOST_FILE, connect
from daq.store.segments import (
    FOLDER,
    UnfinishedError,
    about_of,
    chain_of,
    load,
    open_to_read,
    own_seqs,
    part_of,
)

UNKNOWN_JUMP: Final = 1 << 32
"""Numbers left out where nothing tells how far the damaged file had come."""
PATIENCE: Final = 20_000
"""Failing reads of one table after which the rest of its unreadable ranges is given up (about 1 s)."""

Row = tuple[Any, ...]


@dataclass(slots=True)
class Carried:
    """What was carried over, and what was not."""

    journal: str | None = None
    site: str | None = None
    facts: int = 0
    findings: int = 0
    messages: int = 0
    chunks: int = 0
    missing: list[tuple[int, int]] = field(default_factory=list)
    remarks: list[str] = field(default_factory=list)

    def summary(self) -> str:
        """Return what a person should know."""
        text = (
            f"carried over: {self.facts} facts, {self.findings} findings, {self.messages} messages, "
            f"{self.chunks} sealed chunks; "
        )
        if self.missing:
            ranges = ", ".join(f"{a}-{b}" if a < b else str(a) for a, b in self.missing[:5])
            text += f"missing facts: {ranges}" + (" and more" if len(self.missing) > 5 else "")
        else:
            text += "no fact is missing"
        return "; ".join([text, *self.remarks])


@dataclass(frozen=True, slots=True)
class _Piece:
    """One chunk as its sealed file names it."""

    frame: str
    first: int
    last: int
    part: int
    file: str
    number: int
    facts: int
    scans: int
    chain: bytes


def carry_over(folder: Path, into: sqlite3.Connection, mark: Mark | None) -> Carried:
    """Fill the fresh host file ``into`` from the damaged one in ``folder`` and from the sealed files."""
    carried = Carried()
    with closing(_Source(folder / HOST_FILE)) as source:
        meta = source.meta()
        pieces = _pieces(folder, mark.journal if mark else None, carried)
        carried.journal = carried.journal or meta.get("journal")
        carried.site = meta.get("site")
        tops = [mark.last_seq] if mark else []
        tops += source.tops()
        last = max([*tops, *(p.last for p in pieces)], default=0)
        sealed_to = _name_pieces(folder, into, source, pieces, carried)
        lost: list[tuple[int, int]] = []
        present: list[int] = []
        for frame in source.frames({p.frame for p in pieces}):
            rows, failed = source.rows(_TAIL, sealed_to.get(frame, 0) + 1, last, frame)
            # rows above the last number that was told prove themselves by their checksums
            rows += source.all(_TAIL, last + 1, UNKNOWN_JUMP << 20, frame)
            lost += failed
            sound = []
            for row in rows:
                try:
                    check_tail(row, "tail row")
                    sound.append(row)
                except JournalDamaged:
                    lost.append((row[0], row[0]))
            present += [row[0] for row in sound]
            into.executemany(
                "INSERT INTO tail (seq, frame, kind, checksum, data) VALUES (?, ?, ?, ?, ?)", sound
            )
        carried.facts = len(present)
        if present or tops or pieces:
            # numbers above the newest row that is left were given, or may have been
            newest = max([*present, *(p.last for p in pieces)], default=0)
            last = max(last, newest)
            lost.append((newest + 1, last))
        _carry_rest(source, into, carried)
        carried.missing = _missing(folder, pieces, np.array(sorted(present), np.int64), lost)
        _carry_gaps(source, into, carried.missing)
        if not tops:
            into.execute(
                "INSERT OR REPLACE INTO gap VALUES (?, ?, 'left out: nothing told how far it had come')",
                (last + 1, last + UNKNOWN_JUMP),
            )
            last += UNKNOWN_JUMP
    into.execute("UPDATE head SET last_seq = ?", (last,))
    return carried


# --- the damaged file -----------------------------------------------------------------------

_TAIL: Final = (
    "SELECT seq, frame, kind, checksum, data FROM tail WHERE seq BETWEEN ? AND ? AND frame = ? ORDER BY seq"
)
_FINDING: Final = (
    "SELECT seq, id, test, kind, checksum, body FROM finding WHERE seq BETWEEN ? AND ? ORDER BY seq"
)
_OUTBOX: Final = (
    "SELECT seq, id, topic, retain, expires_s, acked, checksum, payload FROM outbox "
    "WHERE seq BETWEEN ? AND ? ORDER BY seq"
)
_SNAPSHOT: Final = (
    "SELECT key, seq, engine, checksum, data FROM snapshot WHERE rowid BETWEEN ? AND ? ORDER BY rowid"
)


class _Source:
    """A damaged host file, read as far as it can be; nothing in it is changed."""

    def __init__(self, path: Path) -> None:
        self._connections: list[sqlite3.Connection] = []
        if path.exists() and path.stat().st_size:
            for immutable in (False, True):  # with its write-ahead file if that can be read, else without
                with suppress(sqlite3.Error):
                    connection = connect(path, "ro", immutable=immutable)
                    self._connections.append(connection)
                    connection.execute("SELECT count(*) FROM sqlite_schema").fetchone()
                    break
                self.close()

    def close(self) -> None:
        for connection in self._connections:
            connection.close()
        self._connections = []

    def all(self, sql: str, *given: Any) -> list[Row]:
        """Return all rows, or none where they cannot be read."""
        for connection in self._connections:
            with suppress(sqlite3.Error):
                return connection.execute(sql, given).fetchall()
        return []

    def meta(self) -> dict[str, str]:
        rows = self.all("SELECT key, value FROM meta")
        return {k: v for k, v in rows if isinstance(k, str) and isinstance(v, str)}

    def tops(self) -> list[int]:
        """Return what tells how far the file had come."""
        return [row[0] for row in self.all("SELECT last_seq FROM head") if isinstance(row[0], int)]

    def frames(self, known: set[str]) -> list[str]:
        """Return the names of frames that may have rows, as far as they can be found."""
        names = {HOST, *known}
        hop: list[Row] = [(HOST,)]
        while hop and isinstance(hop[0][0], str):
            names.add(hop[0][0])
            hop = self.all("SELECT min(frame) FROM tail WHERE frame > ?", hop[0][0])
        for sql in ("SELECT DISTINCT frame FROM chunk", "SELECT DISTINCT test FROM finding"):
            names |= {str(row[0]).partition("/")[0] for row in self.all(sql)}
        return sorted(names)

    def rows(self, sql: str, low: int, high: int, *given: Any) -> tuple[list[Row], list[tuple[int, int]]]:
        """Return the rows numbered ``low`` to ``high`` that can be read, and the ranges that cannot.

        Widest ranges first, so that the large sound parts are found before patience ends.
        """
        good: list[Row] = []
        bad: list[tuple[int, int]] = []
        ranges = deque([(low, high)] if low <= high and self._connections else [])
        if not self._connections and low <= high:
            bad.append((low, high))
        failures = 0
        while ranges:
            a, b = ranges.popleft()
            try:
                good += self._connections[0].execute(sql, (a, b, *given)).fetchall()
            except sqlite3.Error:
                failures += 1
                if a == b or failures > PATIENCE:
                    bad.append((a, b))
                else:
                    middle = (a + b) // 2
                    ranges += [(a, middle), (middle + 1, b)]
        return good, bad


def _carry_rest(source: _Source, into: sqlite3.Connection, carried: Carried) -> None:
    """Carry findings, messages, snapshots and the names of entries that were taken."""
    top = _top(source, "finding")
    for seq, name, test, kind, check, body in source.rows(_FINDING, 1, top)[0]:
        if isinstance(body, str) and check == checksum(body.encode(), name):
            into.execute(
                "INSERT OR IGNORE INTO finding VALUES (?, ?, ?, ?, ?, ?)",
                (seq, name, test, kind, check, body),
            )
            carried.findings += 1
    for row in source.rows(_OUTBOX, 1, _top(source, "outbox"))[0]:
        _, name, topic, retain, expires_s, acked, check, payload = row
        if isinstance(payload, bytes) and check == checksum(payload, name, topic, retain, expires_s):
            into.execute("INSERT OR IGNORE INTO outbox VALUES (?, ?, ?, ?, ?, ?, ?, ?)", row)
            carried.messages += not acked
    for row in source.rows(_SNAPSHOT, 1, _top(source, "snapshot"))[0]:
        key, seq, engine, check, data = row
        if isinstance(data, bytes) and check == checksum(data, key, seq, engine):
            into.execute("INSERT OR IGNORE INTO snapshot VALUES (?, ?, ?, ?, ?)", row)
    for row in source.all("SELECT name, seq FROM inbox"):
        into.execute("INSERT OR IGNORE INTO inbox VALUES (?, ?)", row)


def _top(source: _Source, table: str) -> int:
    """Return the greatest row number of a table, or a number above it where that cannot be read."""
    rows = source.all(f"SELECT coalesce(max(rowid), 0) FROM {table}")
    return int(rows[0][0]) if rows else 1 << 40


def _carry_gaps(source: _Source, into: sqlite3.Connection, missing: list[tuple[int, int]]) -> None:
    for row in source.all("SELECT first_seq, last_seq, why FROM gap"):
        into.execute("INSERT OR IGNORE INTO gap VALUES (?, ?, ?)", row)
    for first, last in missing:
        into.execute(
            "INSERT OR REPLACE INTO gap VALUES (?, ?, 'lost when the host file was damaged')", (first, last)
        )


# --- the sealed files -----------------------------------------------------------------------


def _pieces(folder: Path, journal: str | None, carried: Carried) -> list[_Piece]:
    """Return the chunks of all sealed files of this journal, in order, no two overlapping."""
    found: list[tuple[str, _Piece]] = []
    for path in sorted((folder / FOLDER).glob("*.sqlite")):
        try:
            with closing(open_to_read(path)) as connection:
                about = about_of(connection, path)
                for number, first, last, chain, facts, scans in chain_of(connection):
                    piece = _Piece(
                        about["frame"],
                        first,
                        last,
                        part_of(path.name),
                        path.name,
                        number,
                        facts,
                        scans,
                        chain,
                    )
                    found.append((about["journal"], piece))
        except UnfinishedError:
            continue
        except (JournalError, sqlite3.Error) as error:
            carried.remarks.append(f"{path.name} could not be read ({error})")
    counts = Counter(name for name, _ in found)
    carried.journal = journal or (counts.most_common(1)[0][0] if counts else None)
    foreign = {p.file for name, p in found if name != carried.journal}
    if foreign:
        carried.remarks.append(f"of another journal, left alone: {', '.join(sorted(foreign))}")
    own = sorted(
        (p for name, p in found if name == carried.journal), key=lambda p: (p.frame, p.first, -p.part)
    )
    pieces: list[_Piece] = []
    for piece in own:
        # where a later part was begun because a chunk was found wrong, the later part counts
        if not pieces or pieces[-1].frame != piece.frame or piece.first > pieces[-1].last:
            pieces.append(piece)
    return pieces


def _name_pieces(
    folder: Path, into: sqlite3.Connection, source: _Source, pieces: list[_Piece], carried: Carried
) -> dict[str, int]:
    """Name the chunks in the fresh host file; return up to where each frame is sealed."""
    sealed_to: dict[str, int] = {}
    newest = {p.frame: p for p in pieces}
    for piece in list(pieces):
        if piece is newest[piece.frame] and not _is_sound(folder, piece):
            rows = source.all("SELECT 1 FROM tail WHERE frame = ? AND seq = ?", piece.frame, piece.last)
            if rows:  # killed while sealing: its rows are still here, and better
                pieces.remove(piece)
                continue
        into.execute(
            "INSERT INTO chunk (frame, last_seq, first_seq, file, number, facts, scans, chain) "
            "VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            (
                piece.frame,
                piece.last,
                piece.first,
                piece.file,
                piece.number,
                piece.facts,
                piece.scans,
                piece.chain,
            ),
        )
        sealed_to[piece.frame] = piece.last
        carried.chunks += 1
    return sealed_to


def _is_sound(folder: Path, piece: _Piece) -> bool:
    path = folder / FOLDER / piece.file
    with suppress(JournalError, sqlite3.Error), closing(open_to_read(path)) as connection:
        load(connection, piece.number, piece.frame, path)
        return True
    return False


def _missing(
    folder: Path, pieces: list[_Piece], present: IntArray, lost: list[tuple[int, int]]
) -> list[tuple[int, int]]:
    """Return the ranges of numbers in ``lost`` that neither the tail nor a sealed chunk has."""
    ranges = list(_merged(lost))
    parts = [present]
    for piece in pieces:
        if any(piece.first <= b and piece.last >= a for a, b in ranges):
            path = folder / FOLDER / piece.file
            with suppress(JournalError, sqlite3.Error), closing(open_to_read(path)) as connection:
                parts.append(own_seqs(connection, piece.number, piece.frame, path))
    there = np.unique(np.concatenate(parts))
    missing: list[tuple[int, int]] = []
    for a, b in ranges:
        inside = there[(there >= a) & (there <= b)]
        edges = np.concatenate([[a - 1], inside, [b + 1]])
        holes = np.flatnonzero(np.diff(edges) > 1)
        missing += [(int(edges[i]) + 1, int(edges[i + 1]) - 1) for i in holes]
    return missing


def _merged(ranges: list[tuple[int, int]]) -> Iterator[tuple[int, int]]:
    """Yield the union of ``ranges``, in order."""
    low = high = None
    for a, b in sorted(r for r in ranges if r[0] <= r[1]):
        if low is None or high is None:
            low, high = a, b
        elif a <= high + 1:
            high = max(high, b)
        else:
            yield low, high
            low, high = a, b
    if low is not None and high is not None:
        yield low, high
