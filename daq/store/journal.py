"""The journal's one writer: a batch goes in as one transaction, whole chunks move out to sealed files.

Readers in other processes use :class:`daq.store.reader.JournalReader`. Nothing is deleted here
on the program's own account: rows leave the host file only after the sealed file that holds them
is on the disk, and what is damaged is renamed, never removed.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from types import TracebackType
from typing import Final, Self, TypeVar

from daq.codec import canonical_json, encode_finding
from daq.records import Finding
from daq.store.errors import JournalBroken, JournalBusy, JournalDamaged, JournalError, JournalFull, guarded
from daq.store.lock import FolderLock
from daq.store.reader import JournalReader
from daq.store.reading import HOST, JournalReading
from daq.store.recovery import open_host
from daq.store.rows import Batch, Committed, EncodedFact, checksum, encoded
from daq.store.schema import make_folder, transaction
from daq.store.seal import Sealed, Sealer
from daq.store.segments import FOLDER, tidy

__all__ = ["Journal", "JournalReader"]

CHECKPOINT_BYTES: Final = 4 << 20
"""Bytes, roughly, after which a commit also folds the write-ahead file into the host file."""
COMMIT_BYTES: Final = 16_384
"""What a commit adds to the write-ahead file beside its data: about four pages."""
SNAPSHOTS_KEPT: Final = 3
NEWEST: Final = 1 << 62
"""Above every sequence number."""
WAL_FIXED_IN: Final = (3, 51, 3)


def _no_hook(point: str) -> None:
    """Do nothing at a named point; tests end the process there."""


class Journal(JournalReading):
    """The one writer of a folder. Make it with :meth:`open`.

    Methods may be called from several threads; each call is one transaction or less.

    Attributes:
        notices: What a person should know about how it was opened (damage, migrations, versions).
        sqlite_version: Version of the SQLite library in use.
    """

    def __init__(
        self,
        folder: Path,
        lock: FolderLock,
        connection: sqlite3.Connection,
        notices: list[str],
        hook: Callable[[str], None],
    ) -> None:
        super().__init__(folder)
        self._folder_lock = lock
        self._db: sqlite3.Connection | None = connection
        self._hook = hook
        self._broken: JournalError | None = None
        self.notices = notices
        self.sqlite_version = sqlite3.sqlite_version
        meta = dict(connection.execute("SELECT key, value FROM meta").fetchall())
        self.journal_id = meta["journal"]
        self.site = meta["site"]
        self._sealer = Sealer(folder, connection, self.journal_id, self.site, hook, notices)
        self._next = self.last_seq + 1
        # the file's size does not tell: once grown it is written anew from its beginning
        self._unfolded = self.wal_bytes
        lock.mark(self.journal_id, self._next - 1)

    @classmethod
    def open(cls, folder: Path, *, site: str, hook: Callable[[str], None] = _no_hook) -> Journal:
        """Open the journal in ``folder`` for writing: make it, take it over, or recover it.

        Args:
            site: Name of the site; a journal of another one is opened with a notice.
            hook: Called with the name of each point at which a kill is tested.

        Raises:
            JournalBusy: another process holds it; the message names that process. Within 1 s.
            JournalFull, JournalBroken: the disk is full, or cannot be written or read.
            JournalError: the file belongs to another program or to a later version of this one.
        """
        with guarded(folder):
            make_folder(folder)
        lock = FolderLock.acquire(folder)
        try:
            with guarded(folder):
                connection, notices = open_host(folder, site=site, mark=lock.found, hook=hook)
            if sqlite3.sqlite_version_info < WAL_FIXED_IN:
                notices.append(
                    f"SQLite {sqlite3.sqlite_version} can damage a write-ahead file when two connections "
                    "write: only the daemon may write here, everything else opens read-only"
                )
            try:
                return cls(folder, lock, connection, notices, hook)
            except BaseException:
                connection.close()
                raise
        except BaseException:
            lock.release()
            raise

    def _connection(self) -> sqlite3.Connection:
        if self._db is None:
            raise JournalError(f"{self.folder}: got a closed journal, wanted an open one")
        return self._db

    # --- writing --------------------------------------------------------------------------

    def commit(self, batch: Batch) -> Committed:
        """Write ``batch`` in one transaction that is on the disk when this returns.

        Returns:
            The sequence numbers given to the facts, and the ids of findings and messages that
            were there before (they are left as they were).

        Raises:
            JournalFull: no room; nothing of the batch was written, it may be tried again.
            JournalBusy: something else holds the write lock; as above.
            JournalBroken: the disk failed; this and every later commit is refused.
            JournalError: a spool file in ``inbox`` was taken before, or a value has no canonical form
                (a NaN in a finding); nothing was written, and the facts alone may be tried again.
        """
        findings = [(f, _json(f"finding {f.id}", encode_finding, f)) for f in batch.findings]
        status = [(t, _json(f"status of {t}", canonical_json, body)) for t, body in batch.status.items()]
        facts = [f if isinstance(f, EncodedFact) else encoded(f) for f in batch.facts]
        with self._lock:
            self._refuse_if_broken()
            seqs = range(self._next, self._next + len(facts))
            if not batch:
                return Committed(seqs)
            connection = self._connection()
            try:
                with guarded(self._host), transaction(connection):
                    _put_facts(connection, seqs, facts)
                    refused = _put_findings(connection, findings)
                    undelivered = _put_outbox(connection, batch)
                    _put_rest(connection, seqs, batch)
                    connection.executemany("INSERT OR REPLACE INTO status VALUES (?, ?)", status)
                    self._hook("commit.before")
            except (JournalBroken, JournalDamaged) as error:
                self._broken = error
                raise
            self._next = seqs.stop
            for fact in facts:
                self._sealer.note(fact)
            self._hook("commit.after")
            self._unfolded += COMMIT_BYTES + sum(len(f.data) for f in facts)
            self._unfolded += sum(len(s.data) for s in batch.snapshots)
            self._after_commit()
            return Committed(seqs, refused, undelivered)

    def _after_commit(self) -> None:
        """Note the mark and fold in the write-ahead file; the commit stands whatever happens here."""
        try:
            self._folder_lock.mark(self.journal_id, self._next - 1)
            if self._unfolded >= CHECKPOINT_BYTES:
                self.checkpoint()
        except (JournalFull, JournalBusy):
            pass  # tried again at the next commit; ``wal_bytes`` shows that it grows
        except JournalError as error:
            self._broken = error

    @property
    def wal_bytes(self) -> int:
        """Size of the write-ahead file. It grows while a reader holds an old state open."""
        with suppress(FileNotFoundError):
            return self._host.with_name(self._host.name + "-wal").stat().st_size
        return 0

    def checkpoint(self) -> bool:
        """Fold the write-ahead file into the host file; say whether all of it went (no reader in the way)."""
        with self._lock:
            self._hook("checkpoint.before")
            try:
                with guarded(self._host):
                    found = self._connection().execute("PRAGMA wal_checkpoint(PASSIVE)").fetchone()
            except (JournalBroken, JournalDamaged) as error:
                self._broken = error  # a failed fsync is final, whoever asked for it
                raise
            busy, log, done = found
            self._hook("checkpoint.after")
            self._unfolded = 0
        return not busy and log == done

    # --- sealing --------------------------------------------------------------------------

    def seal(
        self,
        frame: str | None = None,
        *,
        into: str | None = None,
        upto: int | None = None,
        whole: bool = True,
        finish: bool = False,
    ) -> list[Sealed]:
        """Move the next chunk of a frame's facts to its sealed file, or one of each frame.

        A call moves at most one chunk a frame, so that it never takes long; call it again while
        it returns something.

        Args:
            frame: The frame; None for all, with the host's own facts.
            into: Name of the sealed file (a test); by default the frame's own name. One file holds
                facts of one frame only.
            upto: Move nothing above this sequence number.
            whole: Move whole chunks only (4096 scans); False also moves the rest, at the end of a test.
            finish: When nothing is left, make the sealed file a plain single one (an archive).

        Raises:
            JournalFull, JournalBusy: nothing is lost, try again later.
            JournalDamaged: a row to be moved is not what was written.
            JournalBroken: as for :meth:`commit`.
        """
        limit = NEWEST if upto is None else upto
        done = []
        with self._lock:
            self._refuse_if_broken()
            self._connection()
            if finish:
                self._sealed.close()
            for name in [*self.frames(), HOST] if frame is None else [frame]:
                try:
                    with guarded(self._host):
                        sealed = self._sealer.next(name, into or name, limit, whole=whole, finish=finish)
                except JournalBroken as error:
                    self._broken = error
                    raise
                if sealed is not None:
                    done.append(sealed)
                    self._unfolded += sealed.facts * 256
        return done

    # --- ends -----------------------------------------------------------------------------

    def close(self) -> None:
        """Fold in the write-ahead file, close everything and let another process in. May be repeated."""
        with self._lock:
            self._sealed.close()
            tidy(self.folder / FOLDER)
            connection, self._db = self._db, None
            if connection is not None:
                with suppress(sqlite3.Error):  # after a broken disk there is nothing more to do here
                    connection.close()
            self._folder_lock.release()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _refuse_if_broken(self) -> None:
        if self._broken is not None:
            raise JournalBroken(f"{self._host}: broken since: {self._broken}") from self._broken


T = TypeVar("T")


def _json(what: str, encode: Callable[[T], str], value: T) -> str:
    """Return the text of a finding or status; it is made before the transaction begins."""
    try:
        return encode(value)
    except (ValueError, TypeError) as error:
        raise JournalError(f"{what}: got {error}, wanted plain JSON values") from error


def _put_facts(connection: sqlite3.Connection, seqs: range, facts: list[EncodedFact]) -> None:
    if not facts:
        return
    connection.executemany(
        "INSERT INTO tail (seq, frame, kind, checksum, data) VALUES (?, ?, ?, ?, ?)",
        (
            (seq, f.frame, f.kind, checksum(f.data, seq, f.frame, f.kind), f.data)
            for seq, f in zip(seqs, facts, strict=True)
        ),
    )
    connection.execute("UPDATE head SET last_seq = ?", (seqs.stop - 1,))


def _put_findings(connection: sqlite3.Connection, findings: list[tuple[Finding, str]]) -> tuple[str, ...]:
    refused = []
    for f, body in findings:
        done = connection.execute(
            "INSERT INTO finding (id, test, kind, checksum, body) VALUES (?, ?, ?, ?, ?) "
            "ON CONFLICT (id) DO NOTHING",
            (f.id, f.frame, f.kind, checksum(body.encode(), f.id), body),
        )
        if not done.rowcount:
            refused.append(f.id)
    return tuple(refused)


def _put_outbox(connection: sqlite3.Connection, batch: Batch) -> tuple[str, ...]:
    refused = []
    for m in batch.outbox:
        name, retain = m.id or None, int(m.retain)
        about = (name, m.topic, retain, m.expires_s)
        done = connection.execute(
            "INSERT INTO outbox (id, topic, retain, expires_s, checksum, payload) VALUES (?, ?, ?, ?, ?, ?) "
            "ON CONFLICT (id) DO NOTHING",
            (*about, checksum(m.payload, *about), m.payload),
        )
        if not done.rowcount:
            refused.append(m.id)
    return tuple(refused)


def _put_rest(connection: sqlite3.Connection, seqs: range, batch: Batch) -> None:
    last = seqs.stop - 1
    connection.executemany("UPDATE outbox SET acked = 1 WHERE seq = ?", ((seq,) for seq in batch.acked))
    connection.executemany("INSERT OR IGNORE INTO aside VALUES (?, ?)", batch.aside)
    connection.executemany("UPDATE outbox SET acked = 2 WHERE seq = ?", ((seq,) for seq, _ in batch.aside))
    for s in batch.snapshots:
        seq = last if s.seq is None else s.seq
        connection.execute(
            "INSERT OR REPLACE INTO snapshot VALUES (?, ?, ?, ?, ?)",
            (s.key, seq, s.engine, checksum(s.data, s.key, seq, s.engine), s.data),
        )
        # a snapshot can be made again from the facts; only the newest are worth their room
        connection.execute(
            "DELETE FROM snapshot WHERE key = ?1 AND seq NOT IN "
            f"(SELECT seq FROM snapshot WHERE key = ?1 ORDER BY seq DESC LIMIT {SNAPSHOTS_KEPT})",
            (s.key,),
        )
    for name in batch.inbox:
        if connection.execute("SELECT 1 FROM inbox WHERE name = ?", (name,)).fetchone():
            raise JournalError(f"spool/{name}: got an entry that was taken before, wanted a new one")
        connection.execute("INSERT INTO inbox VALUES (?, ?)", (name, last))
