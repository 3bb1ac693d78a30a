"""Opening the host file: judge it before anything is written, put aside what is damaged, go on.

A damaged host file is never repaired in place and never removed. A fresh one is built beside it from
every row whose checksum is right (and from what the sealed files say of themselves), the damaged set is
renamed into ``quarantine/``, then the fresh one takes the name. A kill between any two of these steps
leaves a state that the next start carries on from.

Sequence numbers of rows that are lost are never given again; they are named in the table ``gap``.
"""

from __future__ import annotations

import secrets
import sqlite3
import time
from collections.abc import Callable
from contextlib import closing
from pathlib import Path
from typing import Final

from daq.store.errors import JournalDamaged, JournalError, explain
from daq.store.lock import Mark
from daq.store.reading import check_tail
from daq.store.rows import checksum
from daq.store.salvage import carry_over
from daq.store.schema import (
    APPLICATION_ID,
    HOST_FILE,
    MIGRATIONS,
    VERSION,
    connect,
    create_private,
    make_folder,
    migrate,
    prepare_writing,
    settle,
    sync_folder,
    transaction,
    version_of,
)
from daq.store.segments import FOLDER

FRESH_FILE: Final = "journal.sqlite.new"
QUARANTINE: Final = "quarantine"
NEWEST_FINDINGS: Final = 10_000
"""Findings whose checksums are compared at start; rows of facts and open messages are all compared."""

Hook = Callable[[str], None]


def open_host(
    folder: Path, *, site: str, mark: Mark | None, hook: Hook
) -> tuple[sqlite3.Connection, list[str]]:
    """Return a writing connection to a sound host file in ``folder``, and what a person should know.

    Args:
        mark: What the last holder of the folder noted (``lock.FolderLock.found``).

    Raises:
        JournalError: the file is of another program or of a later version.
        sqlite3.Error, OSError: the disk is full, broken or read-only.
    """
    notices: list[str] = []
    host = folder / HOST_FILE
    _undo_half_done(folder)
    trouble = _finish_replacing(folder, notices) or judge(folder, mark)
    if trouble is not None:
        _replace(folder, trouble, site, mark, notices, hook)
    if not host.exists():
        create_private(host)
        sync_folder(folder)
    connection = connect(host, "rw")
    try:
        prepare_writing(connection)
        settle(connection)
        before = version_of(connection)
        made = migrate(connection, hook)
        if made and before:
            notices.append(f"{host}: brought from format {before} to {VERSION}")
        _name_site(connection, site, notices)
    except BaseException:
        connection.close()
        raise
    return connection, notices


def _undo_half_done(folder: Path) -> None:
    """Let SQLite undo what a power cut left half done in a file that was not in WAL mode at that moment.

    That is so while a file is made, and while a sealed one becomes a plain single file. A read-only
    connection refuses such a file, so it is done before the host file is judged and the sealed ones read.
    """
    host = folder / HOST_FILE
    for path in (host, *sorted((folder / FOLDER).glob("*.sqlite"))):
        if path.exists() and path.with_name(path.name + "-journal").exists():
            try:
                with closing(connect(path, "rw")) as connection:
                    connection.execute("SELECT count(*) FROM sqlite_schema").fetchone()
            except sqlite3.Error as error:
                # damage is for those to tell who judge the file; a sealed one can wait for the next start
                if path == host and not isinstance(explain(error, ""), JournalDamaged):
                    raise


def judge(folder: Path, mark: Mark | None) -> str | None:
    """Say what is wrong with the host file, or None; nothing is written.

    A file that is not there (or empty) is in order where nothing else says that there was one.

    Raises:
        JournalError: the file is of another program or of a later version of this one.
    """
    host = folder / HOST_FILE
    wal = host.with_name(HOST_FILE + "-wal")
    if not host.exists() or host.stat().st_size == 0:
        if mark is not None and mark.last_seq > 0:
            return f"got none or an empty one, wanted facts up to {mark.last_seq}"
        if any((folder / FOLDER).glob("*.sqlite")):
            return "got none or an empty one beside sealed files"
        if wal.exists() and wal.stat().st_size > 0:
            return "got a write-ahead file without the file that it belongs to"
        return None
    try:
        with closing(connect(host, "ro")) as connection:
            return _judge_open(host, connection, mark)
    except sqlite3.Error as error:
        problem = explain(error, "opening it")
        if isinstance(problem, JournalDamaged):
            return str(problem)
        raise


def _judge_open(host: Path, connection: sqlite3.Connection, mark: Mark | None) -> str | None:
    complaints = [row[0] for row in connection.execute("PRAGMA quick_check(5)")]
    if complaints != ["ok"]:
        return "; ".join(complaints)
    version = version_of(connection)
    (program,) = connection.execute("PRAGMA application_id").fetchone()
    tables = {name for (name,) in connection.execute("SELECT name FROM sqlite_schema WHERE type = 'table'")}
    if not tables and version == 0:
        # killed in its first start, before the first migration; nothing was ever acknowledged from it
        return f"got no tables, wanted facts up to {mark.last_seq}" if mark and mark.last_seq else None
    if not {"meta", "head", "tail"} <= tables:
        if program == APPLICATION_ID:
            return f"got tables {sorted(tables)}, wanted those of a journal"
        raise JournalError(f"{host}: got the file of another program ({sorted(tables)}), wanted a journal")
    meta = dict(connection.execute("SELECT key, value FROM meta").fetchall())
    if program != APPLICATION_ID or meta.get("schema") != str(version):
        return f"got program {program:#x}, format {version} ({meta.get('schema')} inside) in its header"
    if version > len(MIGRATIONS):
        raise JournalError(f"{host}: got format {version}, this program reads up to {VERSION}")
    try:
        return _judge_rows(connection, mark)
    except JournalDamaged as damage:
        return str(damage)


def _judge_rows(connection: sqlite3.Connection, mark: Mark | None) -> str | None:
    (last,) = connection.execute("SELECT last_seq FROM head").fetchone()
    if mark is not None and mark.last_seq > last:
        return f"got facts up to {last}, wanted up to {mark.last_seq} (the write-ahead file is gone or cut)"
    for row in connection.execute("SELECT seq, frame, kind, checksum, data FROM tail"):
        check_tail(row, "tail row")
        if row[0] > last:
            return f"got a fact {row[0]} above the last one, {last}"
    for seq, name, check, body in connection.execute(
        "SELECT seq, id, checksum, body FROM finding ORDER BY seq DESC LIMIT ?", (NEWEST_FINDINGS,)
    ):
        if not isinstance(body, str) or check != checksum(body.encode(), name):
            return f"finding {seq}: got other text than its checksum was made of"
    for seq, check, payload, *about in connection.execute(
        "SELECT seq, checksum, payload, id, topic, retain, expires_s FROM outbox WHERE acked = 0 ORDER BY seq"
    ):
        if not isinstance(payload, bytes) or check != checksum(payload, *about):
            return f"outbox row {seq}: got other bytes than its checksum was made of"
    return None


def _replace(
    folder: Path, trouble: str, site: str, mark: Mark | None, notices: list[str], hook: Hook
) -> None:
    """Build a fresh host file from what is sound, put the damaged set aside, take its place."""
    fresh = folder / FRESH_FILE
    for name in (fresh, fresh.with_name(FRESH_FILE + "-journal")):
        name.unlink(missing_ok=True)  # half built by a start that was killed; the sources are still there
    create_private(fresh)
    with closing(connect(fresh, "rw")) as connection:
        prepare_writing(connection, wal=False)
        migrate(connection, lambda point: None)
        with transaction(connection):
            carried = carry_over(folder, connection, mark)
            meta = {"journal": carried.journal or secrets.token_hex(8), "site": carried.site or site}
            connection.executemany("INSERT OR REPLACE INTO meta VALUES (?, ?)", meta.items())
            connection.execute("INSERT OR REPLACE INTO meta VALUES ('complete', '1')")
    sync_folder(folder)
    hook("recover.built")
    place = _put_aside(folder, hook)
    hook("recover.aside")
    _take_place(folder)
    hook("recover.done")
    where = f"it was put aside in {place.relative_to(folder)}; " if place else ""
    notices.append(f"{folder / HOST_FILE}: damaged: {trouble}; {where}{carried.summary()}")


def _finish_replacing(folder: Path, notices: list[str]) -> str | None:
    """Finish a replacement that was killed after the damaged file had been put aside."""
    fresh, host = folder / FRESH_FILE, folder / HOST_FILE
    if host.exists() or not fresh.exists():
        return None
    try:
        with closing(connect(fresh, "ro")) as connection:
            done = connection.execute("SELECT 1 FROM meta WHERE key = 'complete'").fetchone()
    except sqlite3.DatabaseError:
        done = None
    if not done:
        return None
    _put_aside(folder, lambda point: None)
    _take_place(folder)
    notices.append(f"{host}: an earlier start was ended while it replaced a damaged file; finished now")
    return None


def _put_aside(folder: Path, hook: Hook) -> Path | None:
    """Rename what there is of the host file's set into a new folder of ``quarantine/``."""
    found = [
        p for suffix in ("", "-wal", "-shm", "-journal") if (p := folder / (HOST_FILE + suffix)).exists()
    ]
    if not found:
        return None
    base = folder / QUARANTINE / time.strftime("%Y%m%dT%H%M%SZ", time.gmtime())
    place, n = base, 1
    while place.exists():
        n += 1
        place = base.with_name(f"{base.name}-{n}")
    make_folder(place)
    for path in found:
        path.rename(place / path.name)
        hook("recover.renamed")
    sync_folder(place)
    sync_folder(folder)
    return place


def _take_place(folder: Path) -> None:
    (folder / FRESH_FILE).rename(folder / HOST_FILE)
    sync_folder(folder)


def _name_site(connection: sqlite3.Connection, site: str, notices: list[str]) -> None:
    meta = dict(connection.execute("SELECT key, value FROM meta").fetchall())
    with transaction(connection):
        if "journal" not in meta:
            connection.execute("INSERT INTO meta VALUES ('journal', ?)", (secrets.token_hex(8),))
        if meta.get("site", site) != site:
            notices.append(
                f"journal of site {meta['site']!r}, opened for site {site!r}: is this the right folder?"
            )
        connection.execute("INSERT OR REPLACE INTO meta VALUES ('site', ?)", (site,))
