"""Every error says whose fault it is, and the rarer ways in which files go wrong."""

from __future__ import annotations

import errno
import os
import shutil
import sqlite3
from pathlib import Path
from random import Random

import pytest
from store_cases import entry, finding, one_by_one, open_journal, scans, started

from daq.codec import encode_fact
from daq.records import Finding, RecordError
from daq.store import chunks, lock, reader
from daq.store.errors import (
    JournalBroken,
    JournalBusy,
    JournalDamaged,
    JournalError,
    JournalFull,
    explain,
)
from daq.store.journal import Journal, JournalReader
from daq.store.rows import Batch, OutboxNew
from daq.store.schema import prepare_writing
from daq.store.segments import open_to_read, own_seqs, sealed_facts
from daq.store.verify import DAMAGE, GAP, NOTE, verify, verify_sealed


def sqlite_error(name: str) -> sqlite3.Error:
    error = sqlite3.OperationalError("words of SQLite")
    error.sqlite_errorcode = getattr(sqlite3, name)
    error.sqlite_errorname = name
    return error


@pytest.mark.parametrize(
    ("error", "kind", "retryable"),
    [
        (sqlite_error("SQLITE_FULL"), JournalFull, True),
        (sqlite_error("SQLITE_BUSY"), JournalBusy, True),
        (sqlite_error("SQLITE_BUSY_SNAPSHOT"), JournalBusy, True),
        (sqlite_error("SQLITE_LOCKED"), JournalBusy, True),
        (sqlite_error("SQLITE_CORRUPT"), JournalDamaged, False),
        (sqlite_error("SQLITE_NOTADB"), JournalDamaged, False),
        (sqlite_error("SQLITE_IOERR_FSYNC"), JournalBroken, False),
        (sqlite_error("SQLITE_READONLY"), JournalBroken, False),
        (sqlite_error("SQLITE_CONSTRAINT_PRIMARYKEY"), JournalBroken, False),
        (sqlite_error("SQLITE_ERROR"), JournalError, False),
        (sqlite3.ProgrammingError("Cannot operate on a closed database."), JournalError, False),
        (sqlite3.OperationalError("Could not decode to UTF-8 column 'body'"), JournalDamaged, False),
        (OSError(errno.ENOSPC, "No space left on device"), JournalFull, True),
        (OSError(errno.EDQUOT, "Disk quota exceeded"), JournalFull, True),
        (OSError(errno.EIO, "Input/output error"), JournalBroken, False),
        (PermissionError(errno.EACCES, "Permission denied"), JournalBroken, False),
        (FileNotFoundError(errno.ENOENT, "No such file"), JournalError, False),
    ],
)
def test_an_error_is_sorted_by_its_remedy(
    error: sqlite3.Error | OSError, kind: type[JournalError], retryable: bool
) -> None:
    """Full: wait. Busy: end the other. Broken: stop acknowledging. Damaged: restore."""
    told = explain(error, "place")
    assert type(told) is kind
    assert told.retryable is retryable
    assert str(told).startswith("place: got ")
    assert ", wanted " in str(told)


@pytest.mark.parametrize(
    "batch",
    [
        Batch(facts=(scans("H1", 0),), findings=(Finding("a", 0, None, "H1", "rate", {"v": float("nan")}),)),
        Batch(facts=(scans("H1", 0),), status={"H1": {"v": {1, 2}}}),
        Batch(facts=(scans("H1", 0),), outbox=(OutboxNew("m", "t", object()),)),  # type: ignore[arg-type]
    ],
    ids=["a NaN", "a set", "no bytes"],
)
def test_a_value_that_cannot_be_stored_is_the_callers_mistake(folder: Path, batch: Batch) -> None:
    """A bug in a conclusion must not stop the record of facts, nor half of its batch go in."""
    with open_journal(folder) as journal:
        with pytest.raises((JournalError, TypeError)):
            journal.commit(batch)
        assert journal.last_seq == 0
        assert list(journal.commit(Batch(facts=batch.facts))) == [1]


def test_a_disk_that_fails_in_a_seal_breaks_the_journal(folder: Path) -> None:
    """The next commit must not be acknowledged by a process whose disk has failed."""

    def fail(point: str) -> None:
        if point == "seal.written":
            raise sqlite_error("SQLITE_IOERR_WRITE")

    with Journal.open(folder, site="hall-a", hook=fail) as journal:
        journal.commit(Batch(facts=(scans("H1", 0),)))
        with pytest.raises(JournalBroken, match="SQLITE_IOERR_WRITE"):
            journal.seal("H1", whole=False)
        with pytest.raises(JournalBroken, match="broken since"):
            journal.commit(Batch(facts=(scans("H1", 1),)))
    with open_journal(folder) as journal:
        assert one_by_one(journal.facts()) == [encode_fact(scans("H1", 0))]


@pytest.mark.parametrize("seed", range(6))
def test_a_ruined_page_costs_what_is_on_it_and_nothing_else(folder: Path, seed: int) -> None:
    """The rows on every other page are carried over under their numbers; those lost are named."""
    random = Random(seed)
    facts = [started(k) if k % 50 == 1 else scans(("H1", "H2")[k % 2], k) for k in range(1, 601)]
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(facts), findings=tuple(finding(k) for k in range(200))))
    host = folder / "journal.sqlite"
    data = bytearray(host.read_bytes())
    page = random.randrange(1, len(data) // 4096)
    data[page * 4096 : (page + 1) * 4096] = random.randbytes(4096)
    host.write_bytes(data)
    with open_journal(folder) as journal:
        assert any("damaged" in n for n in journal.notices)
        left = {s for f in ("H1", "H2", "") for s, _ in journal.facts(frame=f)}
        missing = {s for a, b, _ in journal.gaps() for s in range(a, b + 1)}
        assert left | missing == set(range(1, 601))
        assert not left & missing
        assert len(missing) < 60
        assert [encode_fact(f) for _, f in journal.facts()] == [
            encode_fact(facts[s - 1]) for s in sorted(left)
        ]
        assert list(journal.commit(Batch(facts=(scans("H1", 601),)))) == [601]
    assert [t for t in verify(folder) if t.kind != NOTE] == []


def test_a_ruined_root_page_is_not_searched_for_ever(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """With the top of a table's tree gone every read of it fails; patience ends and the start goes on."""
    monkeypatch.setattr("daq.store.salvage.PATIENCE", 50)
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(600)), findings=(finding(1),)))
        root = (
            journal._connection()
            .execute("SELECT rootpage FROM sqlite_schema WHERE name = 'tail'")
            .fetchone()[0]
        )
    host = folder / "journal.sqlite"
    data = bytearray(host.read_bytes())
    data[(root - 1) * 4096 : root * 4096] = bytes(4096)
    host.write_bytes(data)
    with open_journal(folder) as journal:
        assert [(a, b) for a, b, _ in journal.gaps()] == [(1, 600)]
        assert journal.has_finding(finding(1).id)
        assert any("missing facts: 1-600" in n for n in journal.notices)


def test_gaps_stay_named_when_a_second_file_is_damaged(folder: Path) -> None:
    """What is known to be missing must not become unexplained by the next accident."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(9))))
    for seq in (4, 7):
        connection = sqlite3.connect(folder / "journal.sqlite")
        connection.execute("UPDATE tail SET data = x'00' WHERE seq = ?", (seq,))
        connection.commit()
        connection.close()
        open_journal(folder).close()
    with open_journal(folder) as journal:
        assert [(a, b) for a, b, _ in journal.gaps()] == [(4, 4), (7, 7)]
    assert len(list((folder / "quarantine").iterdir())) == 2
    assert [t.place.rpartition(" ")[2] for t in verify(folder) if t.got == "none"] == ["4-4", "7-7"]


def test_a_replacement_that_was_killed_half_built_is_built_again(folder: Path) -> None:
    """The fresh file counts only from when it is complete."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(9))))
    connection = sqlite3.connect(folder / "journal.sqlite")
    connection.execute("PRAGMA user_version = 7")
    connection.close()
    for rubbish in (b"", b"rubbish" * 1000):
        (folder / "journal.sqlite.new").write_bytes(rubbish)
        copy = folder.parent / f"{folder.name}-{len(rubbish)}"
        shutil.copytree(folder, copy)
        with open_journal(copy) as journal:
            assert len(list(journal.facts())) == 9
        (copy / "journal.sqlite").unlink()
        (copy / "journal.sqlite.new").write_bytes(rubbish)
        with open_journal(copy) as journal:
            assert journal.gaps() == [(1, 9, "lost when the host file was damaged")]
        shutil.rmtree(copy)


def test_a_host_file_that_never_had_tables_is_begun_anew(folder: Path) -> None:
    """Killed, or powered off, in the first moments of the first start."""
    connection = sqlite3.connect(folder / "journal.sqlite")
    connection.execute("PRAGMA journal_mode = WAL")
    connection.close()
    with open_journal(folder) as journal:
        assert not any("damaged" in n for n in journal.notices)
        journal.commit(Batch(facts=(scans("H1", 0),)))
    connection = sqlite3.connect(folder / "journal.sqlite")
    connection.execute("DROP TABLE tail")
    connection.close()
    with open_journal(folder) as journal:
        assert any("damaged" in n and "missing facts: 1" in n for n in journal.notices)


def test_more_sealed_files_are_read_than_are_held_open(folder: Path, small_chunks: int) -> None:
    """A hall has more frames than a process has descriptors to spare."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans(f"F{k % 12}", k) for k in range(48))))
        before = one_by_one(journal.facts())
        journal.seal(whole=False)
        assert sorted(one_by_one(journal.facts())) == sorted(before)
        descriptors = len(os.listdir("/proc/self/fd"))
        for _ in range(3):
            list(journal.facts())
        assert len(os.listdir("/proc/self/fd")) == descriptors


def test_a_journal_at_rest_can_be_read_from_a_disk_that_cannot_be_written(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A copy on a read-only medium is verified and exported like the original."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0),)))
    plain = reader.connect

    def read_only_disk(path: Path, mode: str, *, immutable: bool = False) -> sqlite3.Connection:
        if not immutable:
            raise sqlite_error("SQLITE_CANTOPEN")
        return plain(path, mode, immutable=True)

    monkeypatch.setattr(reader, "connect", read_only_disk)
    with JournalReader(folder) as journal_reader:
        assert len(list(journal_reader.facts())) == 1
    (folder / "journal.sqlite-wal").write_bytes(b"newer than the host file")
    with JournalReader(folder) as journal_reader, pytest.raises(JournalBroken, match="CANTOPEN"):
        journal_reader.status()


def test_a_folder_that_cannot_be_written_is_said(tmp_path: Path) -> None:
    """A file where the folder should be, for one."""
    (tmp_path / "j").write_bytes(b"")
    with pytest.raises(JournalBroken, match="j"):
        Journal.open(tmp_path / "j", site="hall-a")


def test_a_system_without_a_write_ahead_file_is_refused() -> None:
    """Some network disks cannot; silently going on without would give up what the tests show."""
    connection = sqlite3.connect(":memory:")
    with pytest.raises(JournalError, match="wanted 'wal'"):
        prepare_writing(connection)
    connection.close()


def test_a_lock_file_that_was_replaced_is_not_believed(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Somebody removes the lock file just when it is being locked: the lock would hold nobody off."""
    plain, times = lock._locked, 0

    def locked(fd: int) -> bool:
        nonlocal times
        times += 1
        if times == 1:
            (folder / "journal.lock").unlink()
        return plain(fd)

    monkeypatch.setattr(lock, "_locked", locked)
    with open_journal(folder), pytest.raises(JournalBusy):
        open_journal(folder)
    assert times > 2


def test_verify_names_a_host_file_that_is_gone(folder: Path, small_chunks: int) -> None:
    """The sealed files alone are sound, and not the whole record."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0), entry("H1", 1))))
        journal.seal(whole=False)
    (folder / "journal.sqlite").unlink()
    assert [t.kind for t in verify(folder)] == [DAMAGE]


def test_verify_reads_on_behind_a_damaged_chunk(folder: Path, small_chunks: int) -> None:
    """One damaged chunk costs that chunk; the links after it are still compared."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(80))))
        while journal.seal("H1"):
            pass
    path = folder / "tests" / "H1.sqlite"
    for change in ("UPDATE chunk SET data = 'text' WHERE number = 2", "DELETE FROM chunk WHERE number = 2"):
        connection = sqlite3.connect(path)
        connection.execute(change)
        connection.commit()
        connection.close()
        places = [t.place.rpartition(" ")[2] for t in verify(folder) if t.kind == DAMAGE]
        assert places == ["2"]
        assert [t.kind for t in verify(folder) if t.kind == GAP] == [GAP]
        assert next(verify_sealed(path)).place.endswith("chunk 2")
        with pytest.raises(JournalDamaged, match="chunk 2"):
            list(sealed_facts(path)) if "text" in change else list(open_journal_facts(folder))


def open_journal_facts(folder: Path) -> list[object]:
    with JournalReader(folder) as journal:
        return list(journal.facts())


def test_a_sealed_file_without_its_own_tables_is_damaged(folder: Path) -> None:
    """Any SQLite file may lie there."""
    connection = sqlite3.connect(folder / "x.sqlite")
    connection.execute("CREATE TABLE a (b)")
    connection.close()
    with pytest.raises(JournalDamaged, match="1 tables"):
        open_to_read(folder / "x.sqlite")
    with pytest.raises(JournalDamaged, match="no such file"):
        list(sealed_facts(folder / "y.sqlite"))


def test_a_sealed_file_of_a_later_format_is_refused(folder: Path, small_chunks: int) -> None:
    """An older program must not take a later format for damage."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0),)))
        journal.seal(whole=False)
    connection = sqlite3.connect(folder / "tests" / "H1.sqlite")
    connection.execute("PRAGMA user_version = 9")
    connection.close()
    with pytest.raises(JournalError, match="format 9"):
        list(sealed_facts(folder / "tests" / "H1.sqlite"))


@pytest.mark.parametrize("index", [b"", b"\x00" * 40, b"no zlib"])
def test_an_index_that_does_not_fit_is_an_error(index: bytes) -> None:
    """Whatever the bytes, the answer is an error of ours, never one of numpy's."""
    with pytest.raises(RecordError, match="index of a chunk"):
        chunks.pieces_of(index, 3)


def test_any_bytes_for_an_index_give_an_error_of_ours() -> None:
    """The same for indexes that unpack and hold nonsense."""
    random = Random(5)
    for _ in range(300):
        numbers = [random.choice((-1, 0, 1, 2, 3, 5, 1 << 40)) for _ in range(random.randrange(12))]
        data = chunks.zlib.compress(chunks.np.array(numbers, "<i8").tobytes())
        try:
            pieces = chunks.pieces_of(data, 2)
        except RecordError:
            continue
        assert sum(p.seqs.size for p in pieces) == 2


def test_the_numbers_in_a_damaged_chunk_are_not_guessed(folder: Path, small_chunks: int) -> None:
    """A rebuild asks the index of a chunk for its numbers; a damaged one has none to give."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(started(0), scans("H1", 0), entry("H1", 1))))
        journal.seal("H1", whole=False)
    path = folder / "tests" / "H1.sqlite"
    connection = open_to_read(path)
    assert own_seqs(connection, 1, "H1", path).tolist() == [2, 3]
    with pytest.raises(JournalDamaged, match="chunk 7"):
        own_seqs(connection, 7, "H1", path)
    connection.close()
