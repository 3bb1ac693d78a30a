"""What can go wrong with the journal, sorted by the remedy.

===================  ==================================================================================
:class:`JournalBusy`     another process holds it: end that one, or wait
:class:`JournalFull`     no room: what was committed stands, try again when there is room
:class:`JournalBroken`   an I/O or fsync error, or read-only: acknowledge nothing more, alarm, restart
:class:`JournalDamaged`  stored bytes are not what was written: restore from a copy, or go on without
===================  ==================================================================================

An fsync error is final: the kernel marks the pages clean after a failed fsync, so a second
fsync would succeed without anything having reached the disk. It is never retried.
"""

from __future__ import annotations

import errno
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from daq.records import UpturnError


class JournalError(UpturnError):
    """Root of what the store raises; the message names place, got and wanted."""

    retryable = False


class JournalBusy(JournalError):  # noqa: N818 - says what is so
    """Another process holds the folder or the write lock; the message names it where it can."""

    retryable = True


class JournalFull(JournalError):  # noqa: N818 - says what is so
    """No room on the disk (or in a quota). The state before the transaction is intact."""

    retryable = True


class JournalBroken(JournalError):  # noqa: N818 - says what is so
    """The disk failed, or may not be written. Final for this process: nothing more is acknowledged."""


class JournalDamaged(JournalError):  # noqa: N818 - says what is so
    """Stored bytes do not hold what was written there."""


_FULL = {errno.ENOSPC, errno.EDQUOT, errno.EFBIG}
_BUSY_CODES = {sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED, sqlite3.SQLITE_PROTOCOL}
_DAMAGE_CODES = {sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB}


def explain(error: sqlite3.Error | OSError, place: str) -> JournalError:
    """Return our error for one of SQLite or of the operating system; raise it ``from`` the cause."""
    if isinstance(error, FileNotFoundError):
        return JournalError(f"{place}: got no such file, wanted a journal")
    if isinstance(error, OSError):
        kind = JournalFull if error.errno in _FULL else JournalBroken
        return kind(f"{place}: got {error.strerror or error}, wanted to read and write there")
    code = getattr(error, "sqlite_errorcode", None)
    name = getattr(error, "sqlite_errorname", type(error).__name__)
    primary = None if code is None else code & 0xFF
    if primary == sqlite3.SQLITE_FULL:
        return JournalFull(f"{place}: got {name} ({error}), wanted room on the disk")
    if primary in _BUSY_CODES:
        return JournalBusy(f"{place}: got {name} ({error}), wanted to be the only writer")
    if primary in _DAMAGE_CODES or "Could not decode" in str(error):  # text that is no UTF-8 has no code
        return JournalDamaged(f"{place}: got {name} ({error}), wanted an undamaged file")
    if primary in (None, sqlite3.SQLITE_ERROR):
        return JournalError(f"{place}: got {error}, wanted something that can be done there")
    return JournalBroken(f"{place}: got {name} ({error}), wanted to read and write there")


@contextmanager
def guarded(place: Path | str) -> Iterator[None]:
    """Turn errors of SQLite and of the operating system into ours, said about ``place``."""
    try:
        yield
    except (sqlite3.Error, OSError) as error:
        raise explain(error, str(place)) from error
