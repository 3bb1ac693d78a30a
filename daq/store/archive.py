"""The record of one stretch of a frame's facts as sealed files of its own, readable without the host.

Chunks that the journal has sealed are copied as they are, with their numbers and chain values, so that a
hash noted while the test ran is found in the archive too; a file that does not begin with its first chunk
says which chain value came before. Rows that are not sealed yet become further chunks, chained on
(``sealed_to`` in the table ``about`` says up to which chunk the journal itself had sealed). The host's own
facts of that time stand complete in a file of their own: the copies among a frame's facts leave out
what came after the frame's last one.

Equal content gives equal bytes (with the same versions of SQLite and zlib).
"""

from __future__ import annotations

import heapq
import sqlite3
from collections.abc import Iterator
from contextlib import closing
from dataclasses import dataclass
from operator import itemgetter
from pathlib import Path
from typing import Any, Final

from daq.codec import encode_fact
from daq.records import Fact, RecordError, RulesAdopted
from daq.store.chunks import Chunk, Row, link, pack, split, unpack
from daq.store.errors import JournalDamaged, explain, guarded
from daq.store.reader import JournalReader, open_host_to_read
from daq.store.reading import HOST, OnDamage, tail_fact
from daq.store.schema import HOST_FILE, connect, create_private, transaction
from daq.store.segments import (
    COLUMNS,
    FOLDER,
    about_of,
    begin,
    file_name,
    genesis_of,
    load,
    open_to_read,
    part_of,
    sealed_to_of,
)
from daq.store.survey import TestRun, tests_of

HOST_PART: Final = file_name(HOST)
_ALL: Final = f"number, chain, checksum, {COLUMNS}"


@dataclass(frozen=True, slots=True)
class Stretch:
    """The facts ``first`` to ``last`` (sequence numbers) of ``frame`` and of the host."""

    frame: str
    first: int
    last: int


@dataclass(frozen=True, slots=True)
class _Source:
    """What the host file says of a stretch at one moment."""

    journal: str
    site: str
    chunks: list[tuple[str, int]]
    rows: list[Any]


def runs_of(reader: JournalReader, frame: str, upto: int | None = None) -> list[TestRun]:
    """Return the tests of ``frame`` in the order they began; what cannot be read is passed over."""
    facts = reader.facts(frame=frame, upto=upto, on_damage=lambda damage: None)
    return tests_of((seq, fact) for seq, fact in facts if isinstance(fact, RulesAdopted))


def write_archive(journal: Path, stretch: Stretch, into: Path) -> list[str]:
    """Write the sealed files of ``stretch`` to the folder ``into``; return what a person should know.

    Damage goes along: a chunk that is not what was sealed is copied as it is, for ``verify`` to name.

    Raises:
        JournalError: the journal cannot be read.
    """
    notices: list[str] = []
    host_rows = _host_rows(journal, stretch, notices)
    with guarded(journal / HOST_FILE), closing(open_host_to_read(journal / HOST_FILE)) as connection:
        source = _look(connection, stretch)
    rows = _decoded(source.rows, f"{journal / HOST_FILE} tail row", notices)
    by_file: dict[str, list[int]] = {}
    for file, number in source.chunks:
        by_file.setdefault(file, []).append(number)
    with guarded(into):
        for file, numbers in by_file.items():
            last = file == source.chunks[-1][0]
            with closing(_new(into / file)) as target, transaction(target):
                covered = _copy(journal / FOLDER / file, numbers, target, source, stretch.frame, notices)
                if last:
                    _append(target, stretch.frame, _with_host(rows, host_rows, covered))
        if not by_file:
            with closing(_new(into / file_name(stretch.frame))) as target, transaction(target):
                _begin(target, stretch.frame, source, sealed_to="0")
                _append(target, stretch.frame, _with_host(rows, host_rows, stretch.first - 1))
        with closing(_new(into / HOST_PART)) as target, transaction(target):
            _begin(target, HOST, source, sealed_to="0")
            _append(target, HOST, host_rows)
    return notices


def archive_facts(
    folder: Path, stretch: Stretch, on_damage: OnDamage | None = None
) -> Iterator[tuple[int, Fact]]:
    """Yield (seq, fact) of an archive in order, as the journal would have given them.

    Args:
        on_damage: Told about each damaged chunk, which is then left out.

    Raises:
        JournalDamaged: a chunk is not what was written, and ``on_damage`` is None.
    """
    parts = sorted(
        (p for p in folder.glob("*.sqlite") if p.name != HOST_PART), key=lambda p: (part_of(p.name), p.name)
    )
    own = (item for part in parts for item in _part_facts(part, stretch.frame, stretch, on_damage))
    return heapq.merge(_part_facts(folder / HOST_PART, HOST, stretch, on_damage), own, key=itemgetter(0))


def chunks_of(path: Path) -> list[dict[str, Any]]:
    """Return number, numbers of facts, counts, chain and content of every chunk of a sealed file."""
    with guarded(path), closing(open_to_read(path)) as connection:
        about = about_of(connection, path)
        sealed_to = sealed_to_of(about)
        return [
            {
                "file": path.name, "number": n, "first_seq": a, "last_seq": b, "facts": facts, "scans": scans,
                "content": content.hex(), "chain": chain.hex(), "sealed": n <= sealed_to,
            }
            for n, a, b, facts, scans, content, chain in connection.execute(
                "SELECT number, first_seq, last_seq, facts, scans, content, chain FROM chunk ORDER BY number"
            )
        ]  # fmt: skip


def _part_facts(
    path: Path, frame: str, stretch: Stretch, on_damage: OnDamage | None
) -> Iterator[tuple[int, Fact]]:
    with closing(open_to_read(path)) as connection:
        with guarded(path):
            numbers = [n for (n,) in connection.execute("SELECT number FROM chunk ORDER BY number")]
        for number in numbers:
            try:
                records = unpack(load(connection, number, frame, path))
            except (RecordError, sqlite3.Error, JournalDamaged) as error:
                damage = JournalDamaged(f"{path} chunk {number}: {error}")
                if on_damage is None:
                    raise damage from error
                on_damage(damage)
                continue
            own = (r.cut(stretch.first - 1, stretch.last) for r in records if r.fact.frame == frame)
            yield from (c for c in own if c is not None)


# --- writing --------------------------------------------------------------------------------


def _look(connection: sqlite3.Connection, stretch: Stretch) -> _Source:
    given = (stretch.frame, stretch.first, stretch.last)
    with transaction(connection, "DEFERRED"):
        meta = dict(connection.execute("SELECT key, value FROM meta").fetchall())
        chunks = connection.execute(
            "SELECT file, number FROM chunk WHERE frame = ? AND last_seq >= ? AND first_seq <= ? "
            "ORDER BY last_seq",
            given,
        ).fetchall()
        rows = connection.execute(
            "SELECT seq, frame, kind, checksum, data FROM tail WHERE frame = ? AND seq >= ? AND seq <= ? "
            "ORDER BY seq",
            given,
        ).fetchall()
    return _Source(meta["journal"], meta["site"], chunks, rows)


def _host_rows(journal: Path, stretch: Stretch, notices: list[str]) -> list[Row]:
    with JournalReader(journal) as reader:
        facts = reader.facts(
            frame=HOST, after=stretch.first - 1, upto=stretch.last,
            on_damage=lambda damage: notices.append(str(damage)),
        )  # fmt: skip
        return [(seq, encode_fact(fact), fact) for seq, fact in facts]


def _decoded(rows: list[Any], place: str, notices: list[str]) -> list[Row]:
    out: list[Row] = []
    for row in rows:
        try:
            out.append((row[0], row[4], tail_fact(row, place)))
        except JournalDamaged as damage:
            notices.append(str(damage))
    return out


def _with_host(rows: list[Row], host_rows: list[Row], after: int) -> list[Row]:
    return list(heapq.merge(rows, (r for r in host_rows if r[0] > after), key=itemgetter(0)))


def _new(path: Path) -> sqlite3.Connection:
    create_private(path)
    connection = connect(path, "rw")
    # a copy in a folder of its own: where it is not finished it is made anew
    connection.execute("PRAGMA journal_mode = OFF")
    connection.execute("PRAGMA synchronous = OFF")
    return connection


def _begin(target: sqlite3.Connection, frame: str, source: _Source, **more: str) -> None:
    begin(target, frame, source.journal, source.site, **more)


def _copy(
    path: Path, numbers: list[int], target: sqlite3.Connection, source: _Source, frame: str,
    notices: list[str],
) -> int:  # fmt: skip
    """Copy chunks as they are stored; return up to which sequence number they go."""
    covered = 0
    with closing(open_to_read(path)) as connection:
        more = {"sealed_to": str(numbers[-1])}
        if numbers[0] > 1:
            row = connection.execute("SELECT chain FROM chunk WHERE number = ?", (numbers[0] - 1,)).fetchone()
            more |= {"first_number": str(numbers[0]), "before": row[0].hex() if row else ""}
        _begin(target, frame, source, **more)
        for number in numbers:
            place = f"{path} chunk {number}"
            try:
                row = connection.execute(f"SELECT {_ALL} FROM chunk WHERE number = ?", (number,)).fetchone()
            except sqlite3.Error as error:
                notices.append(f"{place}: left out: {explain(error, 'reading it')}")
                continue
            if row is None:
                notices.append(f"{place}: left out: it is missing")
                continue
            try:
                load(connection, number, frame, path)
            except JournalDamaged as damage:
                notices.append(f"copied as it is: {damage}")
            target.execute(f"INSERT INTO chunk ({_ALL}) VALUES ({','.join('?' * 14)})", row)
            covered = max(covered, row[4])
    return covered


def _append(target: sqlite3.Connection, frame: str, rows: list[Row]) -> None:
    """Pack rows into chunks and chain them on to what is there."""
    left = rows
    while left:
        taken, _ = split(left, frame)
        if not taken:
            return  # facts of the host alone: they stand in its own file
        left = left[len(taken) :]
        _put(target, frame, pack(frame, taken))


def _put(target: sqlite3.Connection, frame: str, chunk: Chunk) -> None:
    known = target.execute("SELECT number, chain FROM chunk ORDER BY number DESC LIMIT 1").fetchone()
    if known is None:
        about = dict(target.execute("SELECT key, value FROM about").fetchall())
        known = (0, genesis_of(about))
    number = known[0] + 1
    target.execute(
        f"INSERT INTO chunk ({_ALL}) VALUES ({','.join('?' * 14)})",
        (
            number, link(known[1], number, chunk), chunk.checksum(), chunk.first_seq, chunk.last_seq,
            chunk.facts, chunk.scans, chunk.readings, chunk.first_tick, chunk.last_tick, chunk.codec,
            chunk.content, chunk.index, chunk.data,
        ),
    )  # fmt: skip
