"""The lock of a journal's folder, and beside it the mark: the last number that was acknowledged.

The lock is ``flock`` on ``journal.lock``; it ends with the process, however that ends. The file names
its holder for whoever is refused. After each commit the holder also writes there, without an
fsync, the last sequence number: should the write-ahead file be lost or cut, the mark is
greater than what the journal still holds, and the loss is seen instead of being overwritten.
(A power cut can lose the newest marks, never the commits before them, so a mark is never too great.)
"""

from __future__ import annotations

import fcntl
import json
import os
import time
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from daq.store.errors import JournalBusy, guarded

LOCK_FILE: Final = "journal.lock"
_WIDTH: Final = 255
_PATIENCE_S: Final = 0.4


@dataclass(frozen=True, slots=True)
class Mark:
    """What the last holder wrote: its process, its journal's id, the last acknowledged number."""

    pid: int
    since: str
    journal: str
    last_seq: int


class FolderLock:
    """The lock, held until :meth:`release` or the end of the process."""

    def __init__(self, fd: int, path: Path, found: Mark | None) -> None:
        self._fd = fd
        self._path = path
        self.found = found
        self._since = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime())

    @classmethod
    def acquire(cls, folder: Path) -> FolderLock:
        """Take the lock of ``folder``.

        Raises:
            JournalBusy: another process (or another journal of this one) holds it; within 1 s.
        """
        path = folder / LOCK_FILE
        patience = time.monotonic() + _PATIENCE_S
        while True:
            with guarded(path):
                fd = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
            try:
                with guarded(path):
                    if _locked(fd) and _is_at(fd, path):
                        return cls(fd, path, _read(fd))
                    holder = _read(fd)
            except BaseException:
                os.close(fd)
                raise
            os.close(fd)
            if time.monotonic() > patience:
                who = f"process {holder.pid} since {holder.since}" if holder else "an unknown process"
                raise JournalBusy(f"{folder}: got a journal in use by {who}, wanted to be its only writer")
            time.sleep(0.05)

    def mark(self, journal: str, last_seq: int) -> None:
        """Note who holds the folder and the last acknowledged number. No fsync: see the module's head."""
        text = json.dumps([os.getpid(), self._since, journal, last_seq])
        line = f"{zlib.crc32(text.encode()):08x} {text}".ljust(_WIDTH) + "\n"
        with guarded(self._path):
            os.pwrite(self._fd, line.encode(), 0)

    def release(self) -> None:
        """Let another process in. The file stays, with its mark."""
        if self._fd >= 0:
            os.close(self._fd)
            self._fd = -1


def marked(folder: Path) -> Mark | None:
    """Return the mark in ``folder`` without taking the lock; None where there is none that can be read."""
    try:
        fd = os.open(folder / LOCK_FILE, os.O_RDONLY | os.O_CLOEXEC)
    except OSError:
        return None
    try:
        return _read(fd)
    except OSError:
        return None
    finally:
        os.close(fd)


def _locked(fd: int) -> bool:
    try:
        fcntl.flock(fd, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    return True


def _is_at(fd: int, path: Path) -> bool:
    """Say whether the locked file is still the one of that name (it may have been replaced)."""
    try:
        return os.fstat(fd).st_ino == os.stat(path).st_ino
    except FileNotFoundError:
        return False


def _read(fd: int) -> Mark | None:
    return _parse(os.pread(fd, _WIDTH + 1, 0))


def _parse(line: bytes) -> Mark | None:
    """Return the mark in ``line``; None where there is none or a torn one."""
    crc, _, text = line.decode("ascii", "replace").rstrip().partition(" ")
    if not text or f"{zlib.crc32(text.encode()):08x}" != crc:
        return None
    return Mark(*json.loads(text))
