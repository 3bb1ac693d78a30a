"""Sealed files: one SQLite file a test, to which whole chunks move and in which nothing changes.

A sealed file can be read without the host it came from. While its test goes on it is in WAL mode,
so that a reader never blocks the writer; when the test is over, ``finish`` turns it into a plain
single file. Chunks are numbered from 1 and chained: each ``chain`` is a SHA-256 over the one before.
"""

from __future__ import annotations

import sqlite3
from collections import OrderedDict
from collections.abc import Iterator
from contextlib import nullcontext, suppress
from pathlib import Path
from typing import Final
from urllib.parse import quote

import numpy as np

from daq.codec import canonical_json, decode_fact
from daq.records import Fact, IntArray, RecordError
from daq.store.chunks import OTHER, Chunk, link, pieces_of, unpack
from daq.store.errors import JournalBusy, JournalDamaged, JournalError, explain, guarded
from daq.store.rows import checksum
from daq.store.schema import (
    APPLICATION_ID,
    connect,
    create_private,
    make_folder,
    prepare_writing,
    settle,
    sync_folder,
    transaction,
    version_of,
)

FOLDER: Final = "tests"
VERSION: Final = 1
HOST_NAME: Final = "@host"
"""File of the facts that concern the whole host; no frame's file can have this name."""

TABLES: Final = (
    "CREATE TABLE about (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID",
    """CREATE TABLE chunk (number INTEGER PRIMARY KEY, first_seq INTEGER NOT NULL UNIQUE,
         last_seq INTEGER NOT NULL UNIQUE, facts INTEGER NOT NULL, scans INTEGER NOT NULL,
         readings INTEGER NOT NULL, first_tick INTEGER NOT NULL, last_tick INTEGER NOT NULL,
         codec TEXT NOT NULL, content BLOB NOT NULL, chain BLOB NOT NULL, checksum BLOB NOT NULL,
         rows BLOB NOT NULL, data BLOB NOT NULL)""",
)
COLUMNS: Final = (
    "first_seq, last_seq, facts, scans, readings, first_tick, last_tick, codec, content, rows, data"
)


def file_name(name: str) -> str:
    """Return the file's name for a frame's or test's ``name``, whatever characters that has.

    Percent-encoding (RFC 3986) keeps different names different; a part number follows a ``+``.
    """
    stem = quote(name, safe=" ,()[]=") if name else HOST_NAME
    return f"{stem.replace('.', '%2E')}.sqlite"


def part_name(file: str) -> str:
    """Return the name of the next part of ``file``, for when that one can take no more."""
    stem = file.removesuffix(".sqlite")
    base, plus, number = stem.rpartition("+")
    return f"{base}+{int(number) + 1}.sqlite" if plus else f"{stem}+2.sqlite"


def part_of(file: str) -> int:
    """Return the part number of a sealed file: 1 for the first."""
    return int(file.removesuffix(".sqlite").rpartition("+")[2]) if "+" in file else 1


class SealedWriter:
    """The one that writes a sealed file, for as long as one chunk takes."""

    def __init__(self, connection: sqlite3.Connection, path: Path, frame: str, genesis: bytes) -> None:
        self._connection = connection
        self._path = path
        self._frame = frame
        self._genesis = genesis

    @classmethod
    def open(cls, path: Path, *, frame: str, journal: str, site: str) -> SealedWriter:
        """Open or make the sealed file of ``frame``.

        Raises:
            JournalDamaged: what is there is no sealed file, or that of another frame or journal.
        """
        with guarded(path):
            make_folder(path.parent)
            if not path.exists():
                create_private(path)
                sync_folder(path.parent)
            connection = connect(path, "rw")
        try:
            with guarded(path):
                prepare_writing(connection)
                if version_of(connection) == 0:
                    begin(connection, frame, journal, site)
                about = about_of(connection, path)
            if (about["frame"], about["journal"]) != (frame, journal):
                raise JournalDamaged(f"{path}: got {about}, wanted frame {frame!r} of journal {journal}")
            return cls(connection, path, frame, genesis_of(about))
        except BaseException:
            connection.close()
            raise

    def numbers(self) -> list[tuple[int, int, int, bytes]]:
        """Return (number, first seq, last seq, chain) of every chunk, in order."""
        with guarded(self._path):
            return _numbers(self._connection)

    def chunk(self, number: int) -> Chunk:
        """Return chunk ``number``, with its checksum compared."""
        with guarded(self._path):
            return load(self._connection, number, self._frame, self._path)

    def append(self, chunk: Chunk) -> tuple[int, bytes]:
        """Add a chunk in one synchronous transaction; return its number and its chain value."""
        with guarded(self._path), transaction(self._connection):
            known = _numbers(self._connection, last_only=True)
            number, previous = (known[-1][0] + 1, known[-1][3]) if known else (1, self._genesis)
            chain = link(previous, number, chunk)
            self._connection.execute(
                f"INSERT INTO chunk (number, chain, checksum, {COLUMNS}) VALUES ({','.join('?' * 14)})",
                (
                    number, chain, chunk.checksum(), chunk.first_seq, chunk.last_seq, chunk.facts,
                    chunk.scans, chunk.readings, chunk.first_tick, chunk.last_tick, chunk.codec,
                    chunk.content, chunk.index, chunk.data,
                ),
            )  # fmt: skip
        return number, chain

    def settle(self) -> None:
        """Make sure that the chunks an ended process left are on the disk, not in memory alone.

        Raises:
            JournalBusy: a reader is in the way; try again.
        """
        with guarded(self._path):
            done = settle(self._connection)
        if not done:
            raise JournalBusy(f"{self._path}: got a reader of an old state, wanted to fold in what is there")

    def finish(self) -> bool:
        """Make it a plain single file; say whether it went (a reader may be in the way)."""
        try:
            self._connection.execute("PRAGMA busy_timeout = 50")
            mode = self._connection.execute("PRAGMA journal_mode = DELETE").fetchone()[0]
        except sqlite3.Error as error:
            problem = explain(error, str(self._path))
            if isinstance(problem, JournalBusy):
                return False
            raise problem from error
        return bool(mode == "delete")

    def close(self) -> None:
        """Fold in the write-ahead file (unless a reader is in the way) and let go of the file."""
        with suppress(sqlite3.Error):  # the chunks are on the disk already, in one file or the other
            self._connection.execute("PRAGMA wal_checkpoint(PASSIVE)")
        self._connection.close()


class SealedReader:
    """A few sealed files held open for reading. Not for two threads at once."""

    def __init__(self, folder: Path, limit: int = 8) -> None:
        self._folder = folder
        self._limit = limit
        self._open: OrderedDict[str, sqlite3.Connection] = OrderedDict()

    def chunk(self, file: str, number: int, frame: str) -> Chunk:
        """Return one chunk, with its checksum compared.

        Raises:
            JournalDamaged: the file or the chunk is missing or not what was written.
        """
        path = self._folder / file
        try:
            return load(self.connection(file), number, frame, path)
        except sqlite3.Error as error:
            self.forget(file)
            raise explain(error, f"{path} chunk {number}") from error

    def connection(self, file: str) -> sqlite3.Connection:
        """Return a read-only connection to ``file``."""
        if file in self._open:
            self._open.move_to_end(file)
            return self._open[file]
        connection = open_to_read(self._folder / file)
        self._open[file] = connection
        while len(self._open) > self._limit:
            self._open.popitem(last=False)[1].close()
        return connection

    def forget(self, file: str) -> None:
        """Close ``file`` if it is open."""
        connection = self._open.pop(file, None)
        if connection is not None:
            connection.close()

    def close(self) -> None:
        """Close all."""
        for file in list(self._open):
            self.forget(file)


class UnfinishedError(JournalDamaged):
    """A sealed file whose making was interrupted: it never held anything."""


def open_to_read(path: Path) -> sqlite3.Connection:
    """Return a read-only connection to a sealed file, also on a disk that cannot be written.

    Raises:
        UnfinishedError: the file was begun and never held a chunk.
        JournalDamaged: there is no such file, or it is no sealed file.
    """
    if not path.exists():
        raise JournalDamaged(f"{path}: got no such file, wanted a sealed file")
    with guarded(path):
        try:
            connection = connect(path, "ro")
            version = version_of(connection)
        except sqlite3.OperationalError:
            if path.with_name(path.name + "-wal").exists():
                raise
            # at rest and on a disk where no index of a write-ahead file can be made
            connection = connect(path, "ro", immutable=True)
            version = version_of(connection)
        if version == 0:
            (tables,) = connection.execute("SELECT count(*) FROM sqlite_schema").fetchone()
            connection.close()
            kind = JournalDamaged if tables else UnfinishedError
            raise kind(f"{path}: got format 0 with {tables} tables, wanted a sealed file")
    return connection


def tidy(folder: Path) -> None:
    """Let the writer remove the empty write-ahead files that read-only connections leave behind."""
    for left in folder.glob("*.sqlite-shm"):
        with suppress(sqlite3.Error):  # a reader is at it, or the disk is broken: they do no harm
            connection = connect(left.with_name(left.name.removesuffix("-shm")), "rw")
            try:
                connection.execute("SELECT 1 FROM about").fetchone()
            finally:
                connection.close()


def sealed_facts(path: Path) -> Iterator[tuple[int, Fact]]:
    """Yield (seq, fact) of one sealed file on its own, host facts included; no journal is needed.

    Raises:
        JournalDamaged: a chunk is not what was written; the message names file and chunk.
    """
    connection = open_to_read(path)
    try:
        with guarded(path):
            frame = about_of(connection, path)["frame"]
            numbers = [n for n, *_ in _numbers(connection)]
        for number in numbers:
            with guarded(path):
                chunk = load(connection, number, frame, path)
            for record in records_of(chunk, path, number):
                yield int(record[0]), record[1]
    finally:
        connection.close()


def records_of(chunk: Chunk, path: Path, number: int) -> list[tuple[int, Fact]]:
    """Return (last seq, fact) of each record of a chunk."""
    try:
        return [(int(r.seqs[-1]), r.fact) for r in unpack(chunk)]
    except RecordError as error:
        raise JournalDamaged(f"{path} chunk {number}: {error}") from error


def load(connection: sqlite3.Connection, number: int, frame: str, path: Path) -> Chunk:
    """Read one chunk and compare its checksum."""
    row = connection.execute(f"SELECT checksum, {COLUMNS} FROM chunk WHERE number = ?", (number,)).fetchone()
    if row is None:
        raise JournalDamaged(f"{path} chunk {number}: got none, wanted the chunk that the journal names")
    try:
        chunk = Chunk(frame, *row[1:])
        good = chunk.checksum() == row[0]
    except (TypeError, AttributeError):  # a value of another type, after a bit of the row's head flipped
        good = False
    if not good:
        raise JournalDamaged(f"{path} chunk {number}: got other bytes than its checksum was made of")
    return chunk


def about_of(connection: sqlite3.Connection, path: Path) -> dict[str, str]:
    """Return what a sealed file says of itself: ``frame``, ``journal``, ``site``, ``format``."""
    version = version_of(connection)
    if version > VERSION:
        raise JournalError(f"{path}: got format {version}, this program reads up to {VERSION}")
    about = dict(connection.execute("SELECT key, value FROM about").fetchall())
    if not {"frame", "journal", "site"} <= about.keys():
        raise JournalDamaged(f"{path}: got {about}, wanted frame, journal and site")
    return about


def about_check(about: dict[str, str]) -> str:
    """Return the checksum over what a sealed file says of itself."""
    return checksum(canonical_json({k: v for k, v in about.items() if k != "checksum"}).encode()).hex()


def about_is_sound(about: dict[str, str]) -> bool:
    """Compare that checksum, and whether all keys are known; the first files had none."""
    known = {"frame", "journal", "site", "format", "checksum", "first_number", "before", "sealed_to"}
    return about.keys() <= known and about.get("checksum", about_check(about)) == about_check(about)


def origin_of(about: dict[str, str]) -> tuple[int, bytes]:
    """Return the number of a file's first chunk and the chain value before it.

    An archive holds only the chunks of its test and says what came before them.

    Raises:
        JournalDamaged: that cannot be read.
    """
    try:
        if "before" in about:
            return int(about["first_number"]), bytes.fromhex(about["before"])
    except (ValueError, KeyError) as error:
        raise JournalDamaged(f"about: got {error!r}, wanted the chain value before the file") from error
    return 1, genesis_of(about)


def sealed_to_of(about: dict[str, str]) -> int:
    """Return the number of the newest chunk that the journal itself sealed; later ones an archive packed."""
    return int(about.get("sealed_to", 1 << 62))


def genesis_of(about: dict[str, str]) -> bytes:
    """Return the value that the chain of a file begins with."""
    return f"{about['journal']}|{about['frame']}".encode()


def chain_of(connection: sqlite3.Connection) -> list[tuple[int, int, int, bytes, int, int]]:
    """Return (number, first seq, last seq, chain, facts, scans) of every chunk, in order."""
    return connection.execute(
        "SELECT number, first_seq, last_seq, chain, facts, scans FROM chunk ORDER BY number"
    ).fetchall()


def own_seqs(connection: sqlite3.Connection, number: int, frame: str, path: Path) -> IntArray:
    """Return the sequence numbers in a chunk (copies of the host's facts left out) without unpacking it."""
    row = connection.execute("SELECT rows, facts FROM chunk WHERE number = ?", (number,)).fetchone()
    own: list[IntArray] = [np.empty(0, np.int64)]
    try:
        for piece in pieces_of(row[0], row[1]):
            if piece.counts[0] == OTHER:
                (data,) = connection.execute(
                    "SELECT substr(data, ?, ?) FROM chunk WHERE number = ?",
                    (piece.at + 1, piece.size, number),
                ).fetchone()
                if decode_fact(data).frame != frame:
                    continue
            own.append(piece.seqs)
    except (RecordError, TypeError) as error:
        raise JournalDamaged(f"{path} chunk {number}: {error}") from error
    return np.concatenate(own)


def _numbers(connection: sqlite3.Connection, *, last_only: bool = False) -> list[tuple[int, int, int, bytes]]:
    order = "DESC LIMIT 1" if last_only else "ASC"
    return connection.execute(
        f"SELECT number, first_seq, last_seq, chain FROM chunk ORDER BY number {order}"
    ).fetchall()


def begin(connection: sqlite3.Connection, frame: str, journal: str, site: str, **more: str) -> None:
    """Make the tables of a sealed file, in one transaction; ``more`` is said of it beside the usual."""
    with nullcontext() if connection.in_transaction else transaction(connection):
        for statement in TABLES:
            connection.execute(statement)
        about = {"frame": frame, "journal": journal, "site": site, "format": str(VERSION), **more}
        about["checksum"] = about_check(about)
        connection.executemany("INSERT INTO about VALUES (?, ?)", about.items())
        connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        connection.execute(f"PRAGMA user_version = {VERSION}")
