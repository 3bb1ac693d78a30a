"""The ways that are seldom gone: seals taken up again, forged rows, files that cannot be read."""

from __future__ import annotations

import dataclasses
import shutil
import sqlite3
from collections.abc import Callable
from pathlib import Path

import pytest
from store_cases import finding, one_by_one, open_journal, scans, started

from daq.codec import encode_fact
from daq.records import RecordError
from daq.store import chunks, recovery, segments
from daq.store.chunks import Chunk
from daq.store.errors import JournalBroken, JournalDamaged, JournalError, JournalFull
from daq.store.journal import Journal, JournalReader
from daq.store.lock import FolderLock
from daq.store.rows import Batch, OutboxNew, checksum
from daq.store.schema import VERSION, connect
from daq.store.seal import Sealer
from daq.store.segments import SealedWriter, load, sealed_facts
from daq.store.verify import DAMAGE, NOTE, verify, verify_sealed


class StoppedError(Exception):
    """Stands for the end of the process at a named point."""


def stop_at(wanted: str) -> Callable[[str], None]:
    def hook(point: str) -> None:
        if point == wanted:
            raise StoppedError

    return hook


def execute(path: Path, sql: str, *given: object) -> None:
    connection = sqlite3.connect(path)
    connection.execute(sql, given)
    connection.commit()
    connection.close()


def half_sealed(folder: Path) -> list[bytes]:
    """Make a journal whose seal ended between its two files; return its facts."""
    with Journal.open(folder, site="hall-a", hook=stop_at("seal.written")) as journal:
        journal.commit(Batch((started(0), *(scans("H1", k) for k in range(20)))))
        facts = one_by_one(journal.facts())
        with pytest.raises(StoppedError):
            journal.seal("H1")
    return facts


def damages(folder: Path) -> list[str]:
    return [str(t) for t in verify(folder) if t.kind == DAMAGE]


# --- seals taken up again -------------------------------------------------------------------


def test_a_seal_that_was_stopped_between_its_files_is_taken_up(folder: Path, small_chunks: int) -> None:
    """The chunk is in the sealed file: it is compared with its rows and named, not written twice."""
    facts = half_sealed(folder)
    assert damages(folder) == []
    with open_journal(folder) as journal:
        assert one_by_one(journal.facts()) == facts
        (sealed,) = journal.seal("H1")
        assert (sealed.file, sealed.number, sealed.facts) == ("H1.sqlite", 1, 21)
        assert one_by_one(journal.facts()) == facts
        assert journal.seal("H1", whole=False) == []
    assert len(list(sealed_facts(folder / "tests" / "H1.sqlite"))) == 2
    assert damages(folder) == []


def test_a_chunk_that_differs_from_its_rows_is_not_taken_up(folder: Path, small_chunks: int) -> None:
    """Until the host file names a chunk its rows are the truth."""
    half_sealed(folder)
    data = encode_fact(scans("H1", 99))
    execute(
        folder / "journal.sqlite", "UPDATE tail SET data = ?, checksum = ? WHERE seq = 3",
        data, checksum(data, 3, "H1", "ScansTaken"),
    )  # fmt: skip
    with open_journal(folder) as journal:
        (sealed,) = journal.seal("H1")
        assert (sealed.file, sealed.number) == ("H1+2.sqlite", 1)
        assert any("other facts" in n for n in journal.notices)
        assert encode_fact(scans("H1", 99)) in one_by_one(journal.facts())


def test_a_sealed_file_put_back_from_an_old_copy_is_not_written_to(folder: Path, small_chunks: int) -> None:
    """Its next chunk would take the number of one that the host file names already."""
    path = folder / "tests" / "H1.sqlite"
    for k in range(2):
        with open_journal(folder) as journal:
            journal.commit(Batch(tuple(scans("H1", 20 * k + i) for i in range(20))))
            journal.seal("H1")
        if k == 0:
            shutil.copy(path, folder / "old")
    shutil.copy(folder / "old", path)
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", 40 + i) for i in range(20))))
        (sealed,) = journal.seal("H1")
        assert sealed.file == "H1+2.sqlite"
    assert any("chunk 2" in t for t in damages(folder))


def test_a_sealed_file_that_fails_while_it_is_written_is_left(
    folder: Path, small_chunks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A damaged page in it must not stop sealing for good."""
    plain, times = SealedWriter.append, 0

    def append(self: SealedWriter, chunk: Chunk) -> tuple[int, bytes]:
        nonlocal times
        times += 1
        if times == 1:
            raise JournalDamaged("a page")
        return plain(self, chunk)

    monkeypatch.setattr(SealedWriter, "append", append)
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(20))))
        assert [s.file for s in journal.seal("H1")] == ["H1+2.sqlite"]


def test_rows_are_read_again_only_when_a_chunk_can_be_whole(
    folder: Path, small_chunks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The engine asks after every commit; looking costs a decoding of every row."""
    looks = 0
    plain = Sealer._next_chunk

    def counted(self: Sealer, frame: str, upto: int, *, whole: bool) -> Chunk | None:
        nonlocal looks
        looks += 1
        return plain(self, frame, upto, whole=whole)

    monkeypatch.setattr(Sealer, "_next_chunk", counted)
    with open_journal(folder) as journal:
        sealed = []
        for k in range(60):
            journal.commit(Batch(facts=(scans("H1", k),)))
            sealed += journal.seal("H1")
        assert [s.scans for s in sealed] == [20, 20, 20]
        assert looks <= 7


def test_the_end_of_a_test_that_has_no_file_is_no_error(folder: Path) -> None:
    """Set up, and taken off again before the first reading."""
    with open_journal(folder) as journal:
        assert journal.seal("H1", finish=True) == []
        assert not (folder / "tests").exists()


def test_an_error_at_the_end_of_a_test_is_told(
    folder: Path, small_chunks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Only a reader in the way may be passed over in silence."""
    path = folder / "x.sqlite"
    writer = SealedWriter.open(path, frame="H1", journal="j", site="s")
    assert writer.finish()
    writer.close()
    with pytest.raises(JournalError, match="closed database"):
        writer.finish()


# --- rows and chunks with checksums made anew ---------------------------------------------------


def forge(path: Path, change: Callable[[Chunk], Chunk]) -> None:
    """Change chunk 1 of a sealed file and make its checksum anew."""
    connection = sqlite3.connect(path)
    c = change(load(connection, 1, "H1", path))
    connection.execute(
        "UPDATE chunk SET first_seq = ?, last_seq = ?, facts = ?, content = ?, rows = ?, data = ?, "
        "codec = ?, checksum = ?",
        (c.first_seq, c.last_seq, c.facts, c.content, c.index, c.data, c.codec, c.checksum()),
    )
    connection.commit()
    connection.close()


@pytest.mark.parametrize(
    ("change", "told"),
    [
        (lambda c: dataclasses.replace(c, data=c.data + b"x"), "wanted what its index says"),
        (lambda c: dataclasses.replace(c, data=bytes(len(c.data))), "version 0"),
        (lambda c: dataclasses.replace(c, codec="later-2"), "codec 'later-2'"),
        (lambda c: dataclasses.replace(c, index=b"x"), "index of a chunk"),
    ],
)
def test_a_chunk_that_cannot_be_unpacked_is_named_by_every_reader(
    folder: Path, small_chunks: int, change: Callable[[Chunk], Chunk], told: str
) -> None:
    """Its checksum may be right and its bytes still be nonsense, or those of a later program."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(20))))
        journal.seal("H1")
    path = folder / "tests" / "H1.sqlite"
    forge(path, change)
    with JournalReader(folder) as reader, pytest.raises(JournalDamaged, match=told):
        list(reader.facts())
    with pytest.raises(JournalDamaged, match=told):
        list(sealed_facts(path))
    assert any(told in t for t in damages(folder))


@pytest.mark.parametrize(
    ("change", "told"),
    [
        (lambda c: dataclasses.replace(c, content=bytes(32)), "other content"),
        (lambda c: dataclasses.replace(c, first_seq=c.first_seq - 1), "numbers 1 to 20"),
        (lambda c: dataclasses.replace(c, last_seq=c.last_seq + 1), "numbers 1 to 20"),
    ],
)
def test_a_chunk_that_says_other_than_it_holds_is_found(
    folder: Path, small_chunks: int, change: Callable[[Chunk], Chunk], told: str
) -> None:
    """Each of its own statements is compared with what is inside."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(20))))
        journal.seal("H1")
    path = folder / "tests" / "H1.sqlite"
    forge(path, change)
    assert any(told in str(t) for t in verify_sealed(path))


def test_a_fact_under_a_wrong_kind_is_found(folder: Path) -> None:
    """The kind beside the bytes chooses what a reader may skip."""
    data = encode_fact(scans("H1", 0))
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0),)))
    check = checksum(data, 1, "H1", "Ticked")
    execute(folder / "journal.sqlite", "UPDATE tail SET kind = 'Ticked', checksum = ?", check)
    assert any("ScansTaken of 'H1', wanted Ticked" in t for t in damages(folder))


def test_a_fact_whose_bytes_are_no_fact_is_damage(folder: Path) -> None:
    """A right checksum over nonsense says only that it was committed so."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0), scans("H1", 1))))
        journal._connection().execute(
            "UPDATE tail SET data = x'05', checksum = ? WHERE seq = 1",
            (checksum(b"\x05", 1, "H1", "ScansTaken"),),
        )
        with pytest.raises(JournalDamaged, match="tail row 1"):
            list(journal.facts())
        told: list[JournalDamaged] = []
        assert [s for s, _ in journal.facts(on_damage=told.append)] == [2]
        assert len(told) == 1


def test_damaged_findings_messages_and_status_are_named_when_read(folder: Path) -> None:
    """Damage that comes while the daemon runs is met by whoever reads next."""
    with open_journal(folder) as journal:
        journal.commit(
            Batch(findings=(finding(1), finding(2)), outbox=(OutboxNew("m", "t", b"x"),), status={"H1": 1})
        )
        connection = journal._connection()
        connection.execute("UPDATE finding SET body = '{}' WHERE seq = 1")
        connection.execute("UPDATE outbox SET payload = 'text'")
        connection.execute("UPDATE status SET body = '{'")
        with pytest.raises(JournalDamaged, match="finding 1"):
            list(journal.findings())
        told: list[JournalDamaged] = []
        assert [n for n, _ in journal.findings(on_damage=told.append)] == [2]
        assert len(told) == 1
        with pytest.raises(JournalDamaged, match="outbox row 1"):
            journal.outbox()
        with pytest.raises(JournalDamaged, match="status"):
            journal.status()


def test_reading_up_to_a_number_below_the_first_chunk_gives_nothing(folder: Path, small_chunks: int) -> None:
    """A frame that began later has nothing there."""
    with open_journal(folder) as journal:
        journal.commit(Batch((scans("H2", 0), *(scans("H1", k) for k in range(20)))))
        journal.seal("H1")
        assert [s for s, _ in journal.facts(upto=1)] == [1]


# --- verify and files that cannot be read ---------------------------------------------------------


def test_verify_goes_on_where_a_file_cannot_be_read(folder: Path, small_chunks: int) -> None:
    """One ruined file must not hide what is wrong with the others."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans(f"H{k % 3}", k) for k in range(90))))
        journal.seal()
    for name in ("H0", "H1"):
        (folder / "tests" / f"{name}.sqlite").write_bytes(b"rubbish" * 999)
    told = damages(folder)
    assert [any(f"{name}.sqlite" in t for t in told) for name in ("H0", "H1", "H2")] == [True, True, False]
    shutil.rmtree(folder / "tests")
    (folder / "journal.sqlite").write_bytes(b"rubbish" * 999)
    assert any("journal.sqlite" in t for t in damages(folder))


def test_verify_names_pages_that_do_not_hold_together_and_a_wrong_header(folder: Path) -> None:
    """SQLite's own check is asked too, and the header is compared with its copy."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(300))))
        root = (
            journal._connection()
            .execute("SELECT rootpage FROM sqlite_schema WHERE name = 'inbox'")
            .fetchone()[0]
        )
    host = folder / "journal.sqlite"
    execute(host, "PRAGMA user_version = 1")
    assert any("format 1" in t for t in damages(folder))
    execute(host, f"PRAGMA user_version = {VERSION}")
    data = bytearray(host.read_bytes())
    data[(root - 1) * 4096 : root * 4096] = bytes(4096)
    host.write_bytes(data)
    assert any("pages that hold together" in t for t in damages(folder))


def test_an_explained_gap_beside_an_unexplained_one(folder: Path) -> None:
    """Explained numbers are notes; the others are troubles, whatever lies between them."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(10))))
        journal._connection().execute("INSERT INTO gap VALUES (4, 5, 'known'), (8, 8, 'known')")
        journal._connection().execute("DELETE FROM tail WHERE seq BETWEEN 3 AND 9")
    troubles = [(t.kind, t.place.rpartition(" ")[2]) for t in verify(folder)]
    assert troubles == [("note", "4-5"), ("note", "8-8"), ("gap", "3-3"), ("gap", "6-7"), ("gap", "9-9")]


def test_a_sealed_file_with_a_write_ahead_file_that_cannot_be_opened_is_not_read_without_it(
    folder: Path, small_chunks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Its newest chunks may be in there: an old answer would look like a whole one."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0),)))
        journal.seal("H1", whole=False)

    def no_index(path: Path, mode: str, *, immutable: bool = False) -> sqlite3.Connection:
        raise sqlite3.OperationalError("unable to open database file")

    path = folder / "tests" / "H1.sqlite"
    path.with_name("H1.sqlite-wal").write_bytes(b"x")
    monkeypatch.setattr(segments, "connect", no_index)
    with pytest.raises(JournalError, match="unable to open"):
        list(sealed_facts(path))


def test_a_sealed_file_that_does_not_say_whose_it_is_is_damaged(folder: Path, small_chunks: int) -> None:
    """Frame and journal decide what its numbers mean."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0),)))
        journal.seal("H1", whole=False)
    execute(folder / "tests" / "H1.sqlite", "DELETE FROM about WHERE key = 'frame'")
    with pytest.raises(JournalDamaged, match="wanted frame, journal and site"):
        list(sealed_facts(folder / "tests" / "H1.sqlite"))
    assert any("wanted frame, journal and site" in t for t in damages(folder))


def test_a_sealed_page_that_cannot_be_read_is_named(folder: Path, small_chunks: int) -> None:
    """The reader lets go of that file, so that one put back in its place is read."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k, 20) for k in range(200))))
        while journal.seal("H1"):
            pass
    path = folder / "tests" / "H1.sqlite"
    sound = path.read_bytes()
    data = bytearray(sound)
    connection = sqlite3.connect(path)
    (root,) = connection.execute("SELECT rootpage FROM sqlite_schema WHERE name = 'chunk'").fetchone()
    connection.close()
    data[(root - 1) * 4096 : root * 4096] = bytes(4096)
    path.write_bytes(data)
    with JournalReader(folder) as reader:
        with pytest.raises(JournalDamaged, match=r"H1\.sqlite chunk 1"):
            list(reader.facts())
        path.write_bytes(sound)
        assert len(list(reader.facts())) == 200


# --- starts that fail, and rebuilds -----------------------------------------------------------------


def test_a_start_that_fails_lets_go_of_everything(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The service manager tries again in the same minute; a lock left behind would refuse it."""
    with pytest.raises(StoppedError):
        Journal.open(folder, site="hall-a", hook=stop_at("migrate.inside"))
    plain = FolderLock.mark

    def full(self: FolderLock, journal: str, last_seq: int) -> None:
        raise JournalFull("no room")

    monkeypatch.setattr(FolderLock, "mark", full)
    with pytest.raises(JournalFull):
        open_journal(folder)
    monkeypatch.setattr(FolderLock, "mark", plain)

    def unreadable(fd: int) -> None:
        raise OSError(5, "Input/output error")

    monkeypatch.setattr("daq.store.lock._read", unreadable)
    with pytest.raises(JournalBroken, match="Input/output"):
        open_journal(folder)
    monkeypatch.undo()
    journal = open_journal(folder)
    journal.close()
    assert journal.wal_bytes == 0


def test_a_host_file_that_cannot_be_opened_is_not_taken_for_damaged(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Too few descriptors, say: putting the file aside for that would be a loss."""
    open_journal(folder).close()

    def fail(path: Path, mode: str, *, immutable: bool = False) -> sqlite3.Connection:
        error = sqlite3.OperationalError("unable to open database file")
        error.sqlite_errorcode, error.sqlite_errorname = sqlite3.SQLITE_CANTOPEN, "SQLITE_CANTOPEN"
        raise error

    monkeypatch.setattr(recovery, "connect", fail)
    with pytest.raises(JournalBroken, match="CANTOPEN"):
        open_journal(folder)
    assert not (folder / "quarantine").exists()


def test_rows_above_the_last_number_are_damage(folder: Path) -> None:
    """The next commit would meet a number that is taken."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0), scans("H1", 1))))
        journal._connection().execute("UPDATE head SET last_seq = 1")
    (folder / "journal.lock").unlink()
    with open_journal(folder) as journal:
        assert any("above the last one, 1" in n for n in journal.notices)
        assert list(journal.commit(Batch(facts=(scans("H1", 2),)))) == [3]
        assert len(list(journal.facts())) == 3


def test_sealed_files_without_host_file_and_mark_are_named_anew(folder: Path, small_chunks: int) -> None:
    """Somebody saved only the folder of tests."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(20))))
        journal.seal("H1")
        before = (one_by_one(journal.facts()), journal.journal_id)
    (folder / "journal.sqlite").unlink()
    (folder / "journal.lock").unlink()
    (folder / "tests" / "begun.sqlite").write_bytes(b"")
    (folder / "tests" / "ruined.sqlite").write_bytes(b"rubbish" * 999)
    with open_journal(folder) as journal:
        assert (one_by_one(journal.facts()), journal.journal_id) == before
        notice = next(n for n in journal.notices if "damaged" in n)
        assert "beside sealed files" in notice
        assert "ruined.sqlite could not be read" in notice
        assert "begun" not in notice


def test_a_half_sealed_chunk_that_is_wrong_is_not_named_in_a_rebuild(folder: Path, small_chunks: int) -> None:
    """Both at once: a seal was ended, its chunk is bad, and the host file is damaged. The rows count."""
    facts = half_sealed(folder)
    execute(folder / "tests" / "H1.sqlite", "UPDATE chunk SET data = x'00'")
    execute(folder / "journal.sqlite", "PRAGMA user_version = 7")
    with open_journal(folder) as journal:
        assert one_by_one(journal.facts()) == facts
        assert journal.gaps() == []


def test_a_damaged_chunk_stays_named_in_a_rebuild(folder: Path, small_chunks: int) -> None:
    """Leaving it out would turn a damage that is told into a silence."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(20))))
        journal.seal("H1")
    execute(folder / "tests" / "H1.sqlite", "UPDATE chunk SET data = x'00'")
    execute(folder / "journal.sqlite", "PRAGMA user_version = 7")
    with open_journal(folder) as journal, pytest.raises(JournalDamaged, match="chunk 1"):
        list(journal.facts())


def test_only_what_is_missing_between_sound_rows_is_named(folder: Path, small_chunks: int) -> None:
    """Numbers that sealed chunks hold are not missing, also where rows around them are lost."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(20))))
        journal.commit(Batch(tuple(scans("H2", k) for k in range(30))))
        journal.seal("H1")
        journal._connection().execute("UPDATE tail SET data = x'00' WHERE seq IN (25, 26, 40)")
    with open_journal(folder) as journal:
        assert [(a, b) for a, b, _ in journal.gaps()] == [(25, 26), (40, 40)]
    assert [t for t in verify(folder) if t.kind != NOTE] == []


def test_packing_nothing_is_a_mistake_that_is_noticed() -> None:
    """A chunk without facts would have no numbers."""
    with pytest.raises((ValueError, IndexError, RecordError)):
        chunks.pack("H1", [])


def test_a_read_only_connection_cannot_write(folder: Path) -> None:
    """Also where the file system would allow it."""
    open_journal(folder).close()
    connection = connect(folder / "journal.sqlite", "ro")
    with pytest.raises(sqlite3.OperationalError, match="readonly"):
        connection.execute("DELETE FROM meta")
    connection.close()


def test_a_stale_write_ahead_file_never_meets_the_fresh_host_file(folder: Path) -> None:
    """Killed between the renames: the old file is aside, its write-ahead file is not yet."""
    with open_journal(folder) as journal:
        journal.commit(Batch(facts=(scans("H1", 0), scans("H1", 1))))
    execute(folder / "journal.sqlite", "PRAGMA user_version = 7")
    with pytest.raises(StoppedError):
        Journal.open(folder, site="hall-a", hook=stop_at("recover.renamed"))
    assert not (folder / "journal.sqlite").exists()
    stale = folder / "journal.sqlite-wal"
    stale.write_bytes(b"stale" * 2000)
    with open_journal(folder) as journal:
        assert any("ended while it replaced" in n for n in journal.notices)
        assert len(list(journal.facts())) == 2
        kept = [
            p
            for p in (folder / "quarantine").rglob("journal.sqlite-wal")
            if p.read_bytes() == b"stale" * 2000
        ]
        assert len(kept) == 1
    assert damages(folder) == []


def test_a_chunk_that_nobody_names_is_found(folder: Path, small_chunks: int) -> None:
    """Without its name in the host file its facts are never read."""
    with open_journal(folder) as journal:
        journal.commit(Batch(tuple(scans("H1", k) for k in range(20))))
        journal.seal("H1")
        journal._connection().execute("DELETE FROM chunk")
    assert any("does not name" in t for t in damages(folder))
