"""A journal read by another process: read-only, whether or not the writer is at work."""

from __future__ import annotations

import sqlite3
import time
from pathlib import Path
from types import TracebackType
from typing import Final, Self

from daq.store.errors import JournalError
from daq.store.reading import JournalReading
from daq.store.schema import connect

REPLACED_WITHIN_S: Final = 1.0


class JournalReader(JournalReading):
    """A journal opened read-only, by any number of processes, whether or not a writer is at work.

    It follows the writer through restarts, sealing and a replaced host file.
    """

    def __init__(self, folder: Path) -> None:
        super().__init__(folder)
        self._db: sqlite3.Connection | None = None
        self._inode = -1
        self._closed = False

    def _connection(self) -> sqlite3.Connection:
        if self._closed:
            raise JournalError(f"{self.folder}: got a closed reader, wanted an open one")
        inode = self._inode_now()
        if self._db is None or inode != self._inode:
            self._drop()
            self._db, self._inode = open_host_to_read(self._host), inode
        return self._db

    def _inode_now(self) -> int:
        """Return which file has the host file's name; while it is replaced, for moments none has."""
        patience = time.monotonic() + (REPLACED_WITHIN_S if self._db is not None else 0.0)
        while True:
            try:
                return self._host.stat().st_ino
            except FileNotFoundError:
                if time.monotonic() >= patience:
                    raise
                time.sleep(0.01)

    def _drop(self) -> None:
        self._sealed.close()
        if self._db is not None:
            self._db.close()
        self._db = None

    def close(self) -> None:
        """Close everything. May be repeated."""
        with self._lock:
            self._drop()
            self._closed = True

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


def open_host_to_read(path: Path) -> sqlite3.Connection:
    """Return a read-only connection to a host file, also on a disk that cannot be written."""
    try:
        connection = connect(path, "ro")
        connection.execute("SELECT last_seq FROM head")
        return connection
    except sqlite3.OperationalError:
        if path.with_name(path.name + "-wal").exists():
            raise
    # at rest on a disk that cannot be written: no index of a write-ahead file can be made there
    connection = connect(path, "ro", immutable=True)
    connection.execute("SELECT last_seq FROM head")
    return connection
