"""Errors of the disk: what can be tried again is, what cannot ends the writing, nothing is taken back."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import pytest
from store_cases import fill, open_journal, scans

from daq.store.errors import JournalBroken, JournalError
from daq.store.journal import Journal
from daq.store.rows import Batch
from daq.store.schema import connect


class FailingDisk:
    """A connection whose next statement that begins with ``on`` fails with an error of SQLite's."""

    def __init__(self, connection: sqlite3.Connection, on: str, name: str) -> None:
        self.connection = connection
        self.on = on
        self.name = name

    def __getattr__(self, name: str) -> object:
        return getattr(self.connection, name)

    def execute(self, sql: str, *given: object) -> object:
        if sql.startswith(self.on):
            error = sqlite3.OperationalError("injected")
            error.sqlite_errorcode = getattr(sqlite3, self.name)
            error.sqlite_errorname = self.name
            raise error
        return self.connection.execute(sql, *given)


@pytest.mark.parametrize(
    "name",
    ["SQLITE_IOERR_FSYNC", "SQLITE_IOERR_WRITE", "SQLITE_READONLY", "SQLITE_CORRUPT", "SQLITE_CANTOPEN"],
)
def test_after_a_disk_error_nothing_more_is_acknowledged(folder: Path, name: str) -> None:
    """Pages are marked clean after a failed fsync: a second try would succeed without having written."""
    journal = open_journal(folder)
    journal.commit(Batch(facts=(scans("H1", 0),)))
    sound = journal._db
    assert sound
    journal._db = FailingDisk(sound, "COMMIT", name)  # type: ignore[assignment]
    with pytest.raises(JournalError, match=name):
        journal.commit(Batch(facts=(scans("H1", 1),)))
    journal._db = sound
    for refused in (lambda: journal.commit(Batch(facts=(scans("H1", 1),))), journal.seal):
        with pytest.raises(JournalBroken, match=f"broken since.*{name}"):
            refused()
    journal.close()
    with open_journal(folder) as journal:
        assert journal.last_seq == 1


@pytest.mark.parametrize("name", ["SQLITE_FULL", "SQLITE_BUSY"])
def test_a_full_disk_or_a_foreign_lock_may_be_tried_again(folder: Path, name: str) -> None:
    """The state before the transaction is intact, and the batch is still the caller's."""
    with open_journal(folder) as journal:
        sound = journal._db
        assert sound
        journal._db = FailingDisk(sound, "COMMIT", name)  # type: ignore[assignment]
        with pytest.raises(JournalError, match=name) as caught:
            journal.commit(Batch(facts=(scans("H1", 0),)))
        assert caught.value.retryable
        journal._db = sound
        assert (journal.last_seq, list(journal.facts())) == (0, [])
        assert list(journal.commit(Batch(facts=(scans("H1", 0),)))) == [1]


def test_a_full_disk_is_met_by_sqlite_itself_too(folder: Path) -> None:
    """The same with SQLite's own limit of pages in place of the injected error."""
    with open_journal(folder) as journal:
        fill(journal, 3)
        pages = journal._connection().execute("PRAGMA page_count").fetchone()[0]
        journal._connection().execute(f"PRAGMA max_page_count = {pages + 2}")
        with pytest.raises(JournalError, match="SQLITE_FULL") as caught:
            journal.commit(Batch(facts=tuple(scans("H1", k, 50) for k in range(400))))
        assert caught.value.retryable
        assert journal.last_seq == 3
        journal._connection().execute("PRAGMA max_page_count = 100000")
        assert len(journal.commit(Batch(facts=tuple(scans("H1", k, 50) for k in range(40))))) == 40


@pytest.mark.parametrize(("name", "broken"), [("SQLITE_FULL", False), ("SQLITE_IOERR_WRITE", True)])
def test_a_failed_checkpoint_does_not_take_back_the_commit(
    folder: Path, name: str, broken: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The batch is on the disk before the write-ahead file is folded in; only what follows may fail."""
    monkeypatch.setattr("daq.store.journal.CHECKPOINT_BYTES", 0)
    with open_journal(folder) as journal:
        sound = journal._db
        assert sound
        journal._db = FailingDisk(sound, "PRAGMA wal_checkpoint", name)  # type: ignore[assignment]
        assert list(journal.commit(Batch(facts=(scans("H1", 0),)))) == [1]
        journal._db = sound
        if broken:
            with pytest.raises(JournalBroken):
                journal.commit(Batch(facts=(scans("H1", 1),)))
        else:
            assert list(journal.commit(Batch(facts=(scans("H1", 1),)))) == [2]


def test_a_write_ahead_file_that_a_reader_holds_is_seen_to_grow(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A reader stopped in mid-read keeps the file from being folded in; the size tells, commits go on."""
    monkeypatch.setattr("daq.store.journal.CHECKPOINT_BYTES", 50_000)
    with open_journal(folder) as journal:
        fill(journal, 3)
        holder = connect(folder / "journal.sqlite", "ro")
        holder.execute("BEGIN")
        holder.execute("SELECT * FROM head").fetchone()
        fill(journal, 60)
        grown = journal.wal_bytes
        assert grown > 200_000
        assert not journal.checkpoint()
        holder.close()
        assert journal.checkpoint()
        fill(journal, 3)
        assert journal.wal_bytes <= grown
        assert [
            len(f) for _, f in journal.facts(frame="H1") if hasattr(f, "values") and hasattr(f, "channels")
        ]


def test_the_write_ahead_file_is_folded_in_now_and_then_not_at_every_commit(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Once grown the file keeps its size, so that its size is no reason to fold it in."""
    monkeypatch.setattr("daq.store.journal.CHECKPOINT_BYTES", 200_000)
    points: list[str] = []
    with Journal.open(folder, site="hall-a", hook=points.append) as journal:
        for k in range(60):
            journal.commit(Batch(facts=(scans("H1", k),)))
        assert 2 <= points.count("checkpoint.after") <= 6
        assert journal.wal_bytes < 600_000
