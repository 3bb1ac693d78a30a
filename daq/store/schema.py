"""The host file's tables and how they came to be: numbered migrations, each one transaction.

``PRAGMA user_version`` is the number of the last migration made. The same number stands in the
table ``meta``: where the two differ, the header is damaged, and where both are greater than what
this program knows, the file belongs to a later one and is left alone.
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Final
from urllib.parse import quote

from daq.store.errors import JournalError

APPLICATION_ID: Final = 0x5570_746E
"""``Uptn``, in the header of every file that the store writes."""
HOST_FILE: Final = "journal.sqlite"
BUSY_MS: Final = 2000
SETTLE_MS: Final = 500

MIGRATIONS: Final[tuple[tuple[str, ...], ...]] = (
    (  # 1: facts, findings, messages, snapshots, status
        "CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID",
        "CREATE TABLE head (one INTEGER PRIMARY KEY CHECK (one = 1), last_seq INTEGER NOT NULL)",
        "INSERT INTO head VALUES (1, 0)",
        # clustered by frame: a chunk's rows lie together and leave in a few hundred pages, not in
        # thousands that also hold rows of every other frame
        """CREATE TABLE tail (frame TEXT NOT NULL, seq INTEGER NOT NULL, kind TEXT NOT NULL,
             checksum BLOB NOT NULL, data BLOB NOT NULL, PRIMARY KEY (frame, seq)) WITHOUT ROWID""",
        """CREATE TABLE chunk (frame TEXT NOT NULL, last_seq INTEGER NOT NULL, first_seq INTEGER NOT NULL,
             file TEXT NOT NULL, number INTEGER NOT NULL, facts INTEGER NOT NULL, scans INTEGER NOT NULL,
             chain BLOB NOT NULL, PRIMARY KEY (frame, last_seq)) WITHOUT ROWID""",
        """CREATE TABLE finding (seq INTEGER PRIMARY KEY AUTOINCREMENT, id TEXT NOT NULL UNIQUE,
             test TEXT NOT NULL, kind TEXT NOT NULL, checksum BLOB NOT NULL, body TEXT NOT NULL)""",
        "CREATE INDEX finding_test ON finding (test, seq)",
        """CREATE TABLE outbox (seq INTEGER PRIMARY KEY AUTOINCREMENT, id TEXT UNIQUE, topic TEXT NOT NULL,
             retain INTEGER NOT NULL, expires_s INTEGER, acked INTEGER NOT NULL DEFAULT 0,
             checksum BLOB NOT NULL, payload BLOB NOT NULL)""",
        "CREATE INDEX outbox_open ON outbox (seq) WHERE acked = 0",
        """CREATE TABLE snapshot (key TEXT NOT NULL, seq INTEGER NOT NULL, engine TEXT NOT NULL,
             checksum BLOB NOT NULL, data BLOB NOT NULL, PRIMARY KEY (key, seq))""",
        "CREATE TABLE status (test TEXT PRIMARY KEY, body TEXT NOT NULL) WITHOUT ROWID",
    ),
    (  # 2: entries taken from the spool; sequence numbers known to be missing
        "CREATE TABLE inbox (name TEXT PRIMARY KEY, seq INTEGER NOT NULL) WITHOUT ROWID",
        """CREATE TABLE gap (first_seq INTEGER PRIMARY KEY, last_seq INTEGER NOT NULL,
             why TEXT NOT NULL)""",
    ),
    (  # 3: messages that are not what was committed: they stay in the outbox, with 2 under ``acked``
        "CREATE TABLE aside (seq INTEGER PRIMARY KEY, why TEXT NOT NULL)",
    ),
)
VERSION: Final = len(MIGRATIONS)


def create_private(path: Path) -> None:
    """Make an empty file that only its owner may read (0600, less what the umask takes)."""
    os.close(os.open(path, os.O_CREAT | os.O_WRONLY | os.O_CLOEXEC, 0o600))


def make_folder(path: Path) -> None:
    """Make a folder (0700, less what the umask takes) and those above it, durably."""
    missing = [p for p in (path, *path.parents) if not p.exists()]
    for p in reversed(missing):
        p.mkdir(mode=0o700, exist_ok=True)
        sync_folder(p.parent)


def sync_folder(path: Path) -> None:
    """Make the names in a folder durable: a new or renamed file needs that beside its own fsync."""
    fd = os.open(path, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        os.fsync(fd)
    finally:
        os.close(fd)


def connect(path: Path, mode: str, *, immutable: bool = False) -> sqlite3.Connection:
    """Return a connection in ``mode`` ``rw`` or ``ro``; transactions are always said explicitly."""
    uri = f"file:{quote(str(path))}?mode={mode}" + ("&immutable=1" if immutable else "")
    connection = sqlite3.connect(
        uri, uri=True, isolation_level=None, check_same_thread=False, timeout=BUSY_MS / 1000
    )
    connection.execute("PRAGMA trusted_schema = OFF")
    if mode == "ro":
        connection.execute("PRAGMA query_only = ON")
    return connection


def prepare_writing(connection: sqlite3.Connection, *, wal: bool = True) -> None:
    """Set what a writing connection needs: WAL, an fsync per commit, checkpoints by hand.

    ``synchronous=FULL``: with NORMAL a power cut loses acknowledged rows. Automatic checkpoints
    are off, since they would make one commit in a thousand slow at a moment of SQLite's choosing.
    """
    mode = connection.execute(f"PRAGMA journal_mode = {'WAL' if wal else 'DELETE'}").fetchone()[0]
    if wal and mode != "wal":
        raise JournalError(f"journal mode: got {mode!r}, wanted 'wal' (is the folder on a network disk?)")
    connection.execute("PRAGMA synchronous = FULL")
    connection.execute("PRAGMA wal_autocheckpoint = 0")
    connection.execute("PRAGMA journal_size_limit = 16777216")
    connection.execute("PRAGMA secure_delete = OFF")
    connection.execute("PRAGMA foreign_keys = OFF")


def settle(connection: sqlite3.Connection) -> bool:
    """Write anew, into the file itself, what an ended process left in the write-ahead file.

    That may be in memory alone: where its fsync failed, the pages count as clean, and a later fsync
    of the same file would succeed without them. Nothing is built on them before this. The next commit
    then begins the write-ahead file from its start.

    Returns:
        Whether all of it went; not where somebody read an old state for half a second.
    """
    connection.execute(f"PRAGMA busy_timeout = {SETTLE_MS}")
    _, log, done = connection.execute("PRAGMA wal_checkpoint(RESTART)").fetchone()
    connection.execute(f"PRAGMA busy_timeout = {BUSY_MS}")
    return bool(log == done)


@contextmanager
def transaction(connection: sqlite3.Connection, kind: str = "IMMEDIATE") -> Iterator[None]:
    """One transaction: all of it, or (on any exception) nothing."""
    connection.execute(f"BEGIN {kind}")
    try:
        yield
        connection.execute("COMMIT")
    except BaseException:
        # SQLite may have rolled back by itself (disk full, I/O error)
        if connection.in_transaction:
            with suppress(sqlite3.Error):  # the first error is the one to tell
                connection.execute("ROLLBACK")
        raise


def tail_frames(connection: sqlite3.Connection) -> list[str]:
    """Return the frames that have rows in the tail, the host's "" among them, by hops in its index."""
    return [
        frame
        for (frame,) in connection.execute(
            """WITH RECURSIVE f(x) AS (SELECT min(frame) FROM tail UNION ALL
                 SELECT (SELECT min(frame) FROM tail WHERE frame > x) FROM f WHERE x IS NOT NULL)
               SELECT x FROM f WHERE x IS NOT NULL"""
        )
    ]


def version_of(connection: sqlite3.Connection) -> int:
    """Return the number of the last migration made."""
    return int(connection.execute("PRAGMA user_version").fetchone()[0])


def migrate(
    connection: sqlite3.Connection,
    hook: Callable[[str], None],
    migrations: tuple[tuple[str, ...], ...] = MIGRATIONS,
) -> list[int]:
    """Bring the host file to the newest version; return the numbers of the migrations made."""
    made = []
    for number in range(version_of(connection) + 1, len(migrations) + 1):
        hook("migrate.before")
        with transaction(connection):
            for statement in migrations[number - 1]:
                connection.execute(statement)
            connection.execute("INSERT OR REPLACE INTO meta VALUES ('schema', ?)", (str(number),))
            connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
            connection.execute(f"PRAGMA user_version = {number}")
            hook("migrate.inside")
        hook("migrate.after")
        made.append(number)
    return made
