"""What the writer and the readers of a journal have in common: every way of reading it.

Each page is read in one short transaction, so that a reader that is held up never keeps the
write-ahead file from being folded in, and it goes on by sequence number, so that it neither loses
nor repeats anything when rows are sealed, or the host file is replaced, between two pages.
"""

from __future__ import annotations

import heapq
import json
import sqlite3
import threading
from abc import ABC, abstractmethod
from collections.abc import Callable, Collection, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from operator import itemgetter
from pathlib import Path
from typing import Any, Final

from daq.codec import decode_fact, decode_finding
from daq.records import Fact, Finding, RecordError
from daq.store.chunks import unpack
from daq.store.errors import JournalDamaged, guarded
from daq.store.rows import OutboxRow, Snapshot, checksum
from daq.store.schema import HOST_FILE, tail_frames, transaction
from daq.store.segments import FOLDER, SealedReader

HOST: Final = ""
"""The ``frame`` of facts that concern the whole host."""
PAGE: Final = 1024

OnDamage = Callable[[JournalDamaged], None]


@dataclass(frozen=True, slots=True)
class _Page:
    facts: list[tuple[int, Fact]]
    reached: int
    more: bool


class JournalReading(ABC):
    """Reading methods; whoever inherits says how to get at the host file (:meth:`_connection`)."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._host = folder / HOST_FILE
        self._sealed = SealedReader(folder / FOLDER)
        # readers in other threads must not look into a transaction that is half done
        self._lock = threading.RLock()

    @abstractmethod
    def _connection(self) -> sqlite3.Connection:
        """Return the connection to the host file."""

    @contextmanager
    def _reading(self) -> Iterator[sqlite3.Connection]:
        """One short read transaction: all that is read in it is of one moment."""
        with self._lock, guarded(self._host):
            connection = self._connection()
            with transaction(connection, "DEFERRED"):
                yield connection

    # --- facts ----------------------------------------------------------------------------

    @property
    def last_seq(self) -> int:
        """Sequence number of the newest fact; 0 in an empty journal."""
        with self._reading() as connection:
            return _last_seq(connection)

    def frames(self) -> list[str]:
        """Return the names of all frames that have facts, in order; the host's "" left out."""
        with self._reading() as connection:
            sealed = connection.execute("SELECT DISTINCT frame FROM chunk").fetchall()
            names = {*tail_frames(connection), *(frame for (frame,) in sealed)}
        return sorted(names - {HOST})

    def facts(
        self,
        *,
        frame: str | None = None,
        after: int = 0,
        upto: int | None = None,
        on_damage: OnDamage | None = None,
    ) -> Iterator[tuple[int, Fact]]:
        """Yield (seq, fact) with ``after`` < seq <= ``upto``, in order of seq.

        Scans that were sealed come as blocks of up to 4096, each under the number of its last
        scan; a block is cut where ``after`` or ``upto`` falls inside. Within one frame (its own facts
        and those of the host) the order is that in which they were committed.

        Args:
            frame: Facts of this frame and of the host; None for those of all frames.
            upto: None for the newest fact at the time of the call.
            on_damage: Told about each damaged row or chunk, which is then left out.

        Raises:
            JournalDamaged: a row or chunk is not what was written, and ``on_damage`` is None.
        """
        end = self.last_seq if upto is None else upto
        names = [HOST, *(self.frames() if frame is None else [frame] if frame != HOST else [])]
        streams = [self._stream(name, after, end, on_damage) for name in names]
        return heapq.merge(*streams, key=itemgetter(0))

    def _stream(
        self, frame: str, after: int, upto: int, on_damage: OnDamage | None
    ) -> Iterator[tuple[int, Fact]]:
        while after < upto:
            page = self._page(frame, after, upto, on_damage)
            yield from page.facts
            if not page.more:
                return
            after = page.reached

    def _page(self, frame: str, after: int, upto: int, on_damage: OnDamage | None) -> _Page:
        with self._reading() as connection:
            entry = connection.execute(
                "SELECT file, number, first_seq, last_seq FROM chunk WHERE frame = ? AND last_seq > ? "
                "ORDER BY last_seq LIMIT 1",
                (frame, after),
            ).fetchone()
            rows = [] if entry else _tail(connection, frame, after, upto)
        if entry is None:
            facts = _decoded(rows, f"{self._host} tail row", on_damage)
            return _Page(facts, rows[-1][0] if rows else upto, len(rows) == PAGE)
        file, number, first, last = entry
        if first > upto:
            return _Page([], upto, False)
        try:
            cut = self._chunk(file, number, frame, after, upto)
        except JournalDamaged as damage:
            if on_damage is None:
                raise
            on_damage(damage)
            cut = []
        return _Page(cut, last, True)

    def _chunk(self, file: str, number: int, frame: str, after: int, upto: int) -> list[tuple[int, Fact]]:
        with self._lock:
            chunk = self._sealed.chunk(file, number, frame)
        try:
            records = unpack(chunk)
        except RecordError as error:
            raise JournalDamaged(f"{self.folder / FOLDER / file} chunk {number}: {error}") from error
        own = (r.cut(after, upto) for r in records if r.fact.frame == frame)
        return [c for c in own if c is not None]

    # --- findings, messages, snapshots, status ------------------------------------------------

    def snapshot(self, key: str, engine: str | None = None) -> Snapshot | None:
        """Return the newest undamaged snapshot of ``key`` (made by ``engine``, if given)."""
        with self._reading() as connection:
            rows = connection.execute(
                "SELECT seq, engine, checksum, data FROM snapshot WHERE key = ? ORDER BY seq DESC", (key,)
            ).fetchall()
        for seq, made_by, check, data in rows:
            sound = isinstance(data, bytes) and check == checksum(data, key, seq, made_by)
            if sound and engine in (None, made_by):
                return Snapshot(key, seq, made_by, data)
        return None

    def findings(
        self,
        *,
        test: str | None = None,
        kinds: Collection[str] | None = None,
        after: int = 0,
        on_damage: OnDamage | None = None,
    ) -> Iterator[tuple[int, Finding]]:
        """Yield (number, finding) in the order of commit, findings having numbers of their own.

        Args:
            test: ``FRAME`` or ``FRAME/POSITION``; None for all.
            on_damage: Told about each damaged row, which is then left out.

        Raises:
            JournalDamaged: a row is not what was written, and ``on_damage`` is None.
        """
        where, given = ["seq > ?"], []
        if test is not None:
            where.append("test = ?")
            given.append(test)
        if kinds is not None:
            where.append(f"kind IN ({','.join('?' * len(kinds))})")
            given.extend(kinds)
        sql = (
            "SELECT seq, id, checksum, body FROM finding "
            f"WHERE {' AND '.join(where)} ORDER BY seq LIMIT {PAGE}"
        )
        while True:
            with self._reading() as connection:
                rows = connection.execute(sql, (after, *given)).fetchall()
            for seq, name, check, body in rows:
                try:
                    found = _finding(f"{self._host} finding {seq}", name, check, body)
                except JournalDamaged as damage:
                    if on_damage is None:
                        raise
                    on_damage(damage)
                else:
                    yield seq, found
            if len(rows) < PAGE:
                return
            after = rows[-1][0]

    def has_finding(self, id: str) -> bool:  # noqa: A002 - the finding's own word
        """Say whether a finding with this id was ever committed."""
        with self._reading() as connection:
            return connection.execute("SELECT 1 FROM finding WHERE id = ?", (id,)).fetchone() is not None

    def outbox(
        self,
        *,
        after: int = 0,
        limit: int = 1000,
        on_damage: Callable[[int, str], None] | None = None,
    ) -> list[OutboxRow]:
        """Return the messages that wait (not acknowledged, not set aside), in the order of commit.

        Fewer than ``limit`` mean that there are no more.

        Args:
            on_damage: Told about each damaged row (its number, what is wrong), which is then left out.

        Raises:
            JournalDamaged: a row is not what was written, and ``on_damage`` is None.
        """
        good: list[OutboxRow] = []
        while (room := limit - len(good)) > 0:
            with self._reading() as connection:
                rows = connection.execute(
                    "SELECT seq, id, topic, payload, retain, expires_s, checksum FROM outbox "
                    "WHERE acked = 0 AND seq > ? ORDER BY seq LIMIT ?",
                    (after, room),
                ).fetchall()
            for row in rows:
                try:
                    good.append(_message(f"{self._host} outbox row {row[0]}", row))
                except JournalDamaged as damage:
                    if on_damage is None:
                        raise
                    on_damage(row[0], f"{damage} (id {row[1]!r}, topic {row[2]!r})")
            if len(rows) < room:
                break
            after = rows[-1][0]
        return good

    def aside(self) -> list[tuple[int, str]]:
        """Return (number, why) of the messages that cannot be sent; they are still in the outbox."""
        with self._reading() as connection:
            return connection.execute("SELECT seq, why FROM aside ORDER BY seq").fetchall()

    def status(self) -> dict[str, Any]:
        """Return the newest status of every test, by its key."""
        with self._reading() as connection:
            rows = connection.execute("SELECT test, body FROM status ORDER BY test").fetchall()
        try:
            return {test: json.loads(body) for test, body in rows}
        except ValueError as error:
            raise JournalDamaged(f"{self._host} status: got {error}, wanted JSON") from error

    def taken(self, name: str) -> bool:
        """Say whether the entry in the spool file ``name`` has become a fact already."""
        with self._reading() as connection:
            return connection.execute("SELECT 1 FROM inbox WHERE name = ?", (name,)).fetchone() is not None

    def gaps(self) -> list[tuple[int, int, str]]:
        """Return (first, last, why) of the sequence numbers that are known to be missing."""
        with self._reading() as connection:
            return connection.execute(
                "SELECT first_seq, last_seq, why FROM gap ORDER BY first_seq"
            ).fetchall()


def _last_seq(connection: sqlite3.Connection) -> int:
    return int(connection.execute("SELECT last_seq FROM head").fetchone()[0])


def _tail(connection: sqlite3.Connection, frame: str, after: int, upto: int) -> list[Any]:
    return connection.execute(
        "SELECT seq, frame, kind, checksum, data FROM tail WHERE frame = ? AND seq > ? AND seq <= ? "
        f"ORDER BY seq LIMIT {PAGE}",
        (frame, after, upto),
    ).fetchall()


def _decoded(rows: list[Any], place: str, on_damage: OnDamage | None) -> list[tuple[int, Fact]]:
    facts = []
    for row in rows:
        try:
            facts.append((row[0], tail_fact(row, place)))
        except JournalDamaged as damage:
            if on_damage is None:
                raise
            on_damage(damage)
    return facts


def tail_fact(row: tuple[int, str, str, bytes, bytes], place: str) -> Fact:
    """Return the fact of one row (seq, frame, kind, checksum, data) of the table ``tail``."""
    check_tail(row, place)
    try:
        return decode_fact(row[4])
    except RecordError as error:
        raise JournalDamaged(f"{place} {row[0]}: {error}") from error


def check_tail(row: tuple[int, str, str, bytes, bytes], place: str) -> None:
    """Compare the checksum of one row of the table ``tail``."""
    seq, frame, kind, check, data = row
    if not isinstance(data, bytes) or check != checksum(data, seq, frame, kind):
        raise JournalDamaged(f"{place} {seq}: got other bytes than its checksum was made of")


def _finding(place: str, name: str, check: bytes, body: str) -> Finding:
    if not isinstance(body, str) or check != checksum(body.encode(), name):
        raise JournalDamaged(f"{place}: got other text than its checksum was made of")
    return decode_finding(body)


def _message(place: str, row: tuple[int, str | None, str, bytes, int, int | None, bytes]) -> OutboxRow:
    seq, name, topic, payload, retain, expires_s, check = row
    if not isinstance(payload, bytes) or check != checksum(payload, name, topic, retain, expires_s):
        raise JournalDamaged(f"{place}: got other bytes than its checksum was made of")
    return OutboxRow(seq, name or "", topic, payload, bool(retain), expires_s)
