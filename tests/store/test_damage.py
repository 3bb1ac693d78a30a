"""Damaged files are found, named and put aside; what is sound goes on, and nothing wrong is ever read."""

from __future__ import annotations

import shutil
import sqlite3
import subprocess
import threading
from collections.abc import Callable
from pathlib import Path
from random import Random

import pytest
from store_cases import fact_of, fill, finding, one_by_one, open_journal, scans

from daq.codec import encode_fact
from daq.store.errors import JournalDamaged, JournalError
from daq.store.journal import Journal, JournalReader
from daq.store.rows import Batch, OutboxNew
from daq.store.schema import MIGRATIONS, connect, migrate, prepare_writing
from daq.store.verify import DAMAGE, GAP, NOTE, verify, verify_sealed


@pytest.fixture
def filled(folder: Path, small_chunks: int) -> Path:
    """A journal at rest: 90 facts, of the first 60 one chunk each of H1 and H2 is sealed."""
    with open_journal(folder / "j") as journal:
        fill(journal, 60)
        journal.seal("H1")
        journal.seal("H2", whole=False)
        fill(journal, 30)
    return folder / "j"


@pytest.fixture
def killed(folder: Path, small_chunks: int) -> Path:
    """The same as its writer was killed: 30 facts in the host file, the next 60 in the write-ahead file."""
    with open_journal(folder / "live") as journal:
        fill(journal, 30)
        journal.checkpoint()
        fill(journal, 60)
        # another process copies: closing these files in this one would drop SQLite's locks on them
        subprocess.run(["cp", "-r", str(folder / "live"), str(folder / "j")], check=True)
    return folder / "j"


def good_ones(folder: Path) -> dict[int, bytes]:
    """Return what the journal still gives, by number of the first scan or fact in it."""
    found: list[bytes] = []
    with open_journal(folder) as journal:
        for frame in ("H1", "H2"):
            found += one_by_one(journal.facts(frame=frame, on_damage=lambda damage: None))
    known = {encode_fact(fact_of(seq)): seq for seq in range(1, 200)}
    assert set(found) <= known.keys(), "nothing that was never committed may come out"
    return {known[f]: f for f in found}


def flip(path: Path, byte: int, bit: int = 0) -> None:
    data = bytearray(path.read_bytes())
    data[byte] ^= 1 << bit
    path.write_bytes(data)


def found(folder: Path) -> list[str]:
    return [str(t) for t in verify(folder) if t.kind != NOTE]


def test_a_sound_journal_has_no_trouble(filled: Path, killed: Path) -> None:
    """The checks below are worth nothing if a sound journal fails them too."""
    assert found(filled) == []
    assert found(killed) == []
    assert len(good_ones(filled)) == len(good_ones(killed)) == 90


@pytest.mark.parametrize("seed", range(12))
def test_any_flipped_bit_is_found_or_harmless(filled: Path, seed: int) -> None:
    """One bit anywhere, in the host file or a sealed one: named by verify, or without any effect."""
    random = Random(seed)
    for _ in range(4):
        copy = filled.parent / f"copy-{random.random()}"
        shutil.copytree(filled, copy)
        victims = [copy / "journal.sqlite", *sorted((copy / "tests").glob("*.sqlite"))]
        victim = random.choice(victims)
        flip(victim, random.randrange(victim.stat().st_size), random.randrange(8))
        try:
            troubles = found(copy)
        except JournalError as error:  # the format's number became that of a later program
            troubles = [str(error)]
        if troubles:
            assert any(victim.name in t for t in troubles)
            continue
        assert good_ones(copy) == good_ones(filled)


def test_every_byte_of_a_stored_fact_is_watched(filled: Path) -> None:
    """A changed number, name or kind is found although SQLite sees nothing wrong."""
    changes = [
        "UPDATE tail SET data = substr(data, 1, length(data) - 1) || x'00' WHERE seq = 90",
        "UPDATE tail SET kind = 'Ticked' WHERE seq = 90",
        "UPDATE tail SET frame = 'H2' WHERE seq = 90",
        "UPDATE tail SET seq = 91 WHERE seq = 90",
        "UPDATE finding SET body = replace(body, ':', '; ') WHERE seq = 3",
        "UPDATE finding SET kind = 'alarm' WHERE seq = 3",
        "UPDATE outbox SET payload = x'01' WHERE seq = 3",
        "UPDATE snapshot SET seq = 89 WHERE seq = 90",
        "UPDATE head SET last_seq = 89",
        "UPDATE chunk SET chain = x'00' WHERE frame = 'H1'",
        "UPDATE chunk SET scans = scans + 1 WHERE frame = 'H1'",
        "DELETE FROM chunk WHERE frame = 'H1'",
        "DELETE FROM tail WHERE seq = 88",
    ]
    for k, change in enumerate(changes):
        copy = filled.parent / f"copy-{k}"
        shutil.copytree(filled, copy)
        connection = sqlite3.connect(copy / "journal.sqlite")
        done = connection.execute(change)
        assert done.rowcount >= 1, change
        connection.commit()
        connection.close()
        assert found(copy), change


def test_every_column_of_a_sealed_chunk_is_watched(filled: Path) -> None:
    """A chunk that was rewritten, even with its checksum made anew, does not fit the chain."""
    path = filled / "tests" / "H1.sqlite"
    columns = [
        "first_seq = first_seq + 1", "last_seq = last_seq - 1", "facts = facts + 1",
        "scans = scans + 1",         "readings = readings + 1", "first_tick = first_tick + 1",
        "last_tick = last_tick + 1", "codec = 'rows-1'",
        "content = x'00'", "chain = x'00'", "checksum = x'00'", "rows = x'00'", "data = substr(data, 2)",
        "number = number + 1",
    ]  # fmt: skip
    sound = path.read_bytes()
    for column in columns:
        connection = sqlite3.connect(path)
        connection.execute(f"UPDATE chunk SET {column}")
        connection.commit()
        connection.close()
        assert any("H1.sqlite" in t for t in found(filled)), column
        assert any(t.kind == DAMAGE for t in verify_sealed(path)), column
        path.write_bytes(sound)
    assert found(filled) == []


def test_a_chunk_written_anew_with_all_its_checks_is_found(filled: Path, small_chunks: int) -> None:
    """A forger who makes every check of the file anew still meets the host file's copy."""
    path = filled / "tests" / "H1.sqlite"
    with open_journal(filled.parent / "forged") as forged:
        facts = [fact_of(seq) for seq in range(1, 61)]
        facts[2] = scans("H1", 77)
        forged.commit(Batch(facts=tuple(facts)))
        forged.seal("H1")
        with sqlite3.connect(filled / "journal.sqlite") as host:
            (journal,) = host.execute("SELECT value FROM meta WHERE key = 'journal'").fetchone()
        host.close()
        forged.journal_id = journal
    shutil.copy(filled.parent / "forged" / "tests" / "H1.sqlite", path)
    connection = sqlite3.connect(path)
    connection.execute("UPDATE about SET value = ? WHERE key = 'journal'", (journal,))
    connection.commit()
    connection.close()
    assert any("chain" in t for t in found(filled))


def test_missing_rows_are_named(filled: Path) -> None:
    """A gap is as bad as a changed number."""
    connection = sqlite3.connect(filled / "journal.sqlite")
    connection.execute("DELETE FROM tail WHERE seq IN (85, 86, 88)")
    connection.commit()
    connection.close()
    gaps = [t.place.rpartition(" ")[2] for t in verify(filled) if t.kind == GAP]
    assert gaps == ["85-86", "88-88"]


def test_a_missing_sealed_file_is_named_with_what_it_held(filled: Path) -> None:
    """Somebody tidies up, and a month of readings is gone."""
    (filled / "tests" / "H2.sqlite").unlink()
    assert any("H2.sqlite" in t and "no such file" in t and "1 chunks" in t for t in found(filled))
    with open_journal(filled) as journal:
        with pytest.raises(JournalDamaged, match=r"H2\.sqlite"):
            list(journal.facts(frame="H2"))
        assert list(journal.facts(frame="H1"))


def test_verify_wants_a_journal(folder: Path) -> None:
    """A wrong folder must not look like a sound journal."""
    with pytest.raises(JournalError, match=r"journal\.sqlite"):
        list(verify(folder))


DAMAGES: dict[str, Callable[[Path], None]] = {
    "overwritten": lambda p: p.write_bytes(b"\x00rubbish" * 4000),
    "emptied": lambda p: p.write_bytes(b""),
    "removed": lambda p: p.unlink(),
    "truncated": lambda p: p.write_bytes(p.read_bytes()[: p.stat().st_size // 2]),
    "header": lambda p: flip(p, 61),
    "program": lambda p: flip(p, 69),
    "first page": lambda p: flip(p, 101, 3),
}


@pytest.mark.parametrize("how", DAMAGES)
def test_a_damaged_host_file_is_put_aside_and_the_record_goes_on(filled: Path, how: str) -> None:
    """Found at start, renamed as it is, a fresh file beside the sealed ones, and the loss is named."""
    host = filled / "journal.sqlite"
    before = good_ones(filled)
    DAMAGES[how](host)
    damaged = host.read_bytes() if host.exists() else None
    with open_journal(filled) as journal:
        notice = next(n for n in journal.notices if "damaged" in n)
        assert ("put aside" in notice) == (damaged is not None)
        assert journal.last_seq == 90, "numbers that were given are never given again"
        kept = one_by_one(f for f in journal.facts(frame="H2", upto=60) if f[1].frame == "H2")
        assert kept == [encode_fact(f) for f in map(fact_of, range(1, 61)) if f.frame == "H2"]
        assert list(journal.commit(Batch(facts=(fact_of(91),)))) == [91]
        missing = [s for a, b, _ in journal.gaps() for s in range(a, b + 1)]
    after = good_ones(filled)
    assert sorted({*after, *missing}) == sorted({*range(1, 92)})
    assert not set(after) & set(missing)
    assert all(after[s] == before[s] for s in after if s < 91)
    assert [t for t in verify(filled) if t.kind == GAP] == []
    if how in ("header", "program"):
        assert missing == [], "a wrong header costs nothing: every row stands alone"
    if damaged is not None:
        (aside,) = (filled / "quarantine").rglob("journal.sqlite")
        assert aside.read_bytes() == damaged


def test_findings_messages_and_snapshots_are_carried_over(filled: Path) -> None:
    """No process alarm may be lost, or published twice, for a damaged page."""
    with open_journal(filled) as journal:
        journal.commit(Batch(acked=(1, 2)))
        before = (list(journal.findings()), journal.outbox(), journal.snapshot("H1"), journal.journal_id)
    flip(filled / "journal.sqlite", 61)
    with open_journal(filled) as journal:
        assert (
            list(journal.findings()),
            journal.outbox(),
            journal.snapshot("H1"),
            journal.journal_id,
        ) == before
        assert journal.taken("e1")
        done = journal.commit(Batch(findings=(finding(1),), outbox=(OutboxNew("m1", "t", b"again"),)))
        assert (done.refused, done.undelivered) == ((finding(1).id,), ("m1",))


def test_a_bad_newest_row_is_found_at_start(filled: Path) -> None:
    """What was last written is what a crash hurts first."""
    connection = sqlite3.connect(filled / "journal.sqlite")
    connection.execute("UPDATE tail SET data = x'00' WHERE seq = 90")
    connection.commit()
    connection.close()
    with open_journal(filled) as journal:
        assert any("missing facts: 90;" in n + ";" for n in journal.notices)
        assert journal.gaps() == [(90, 90, "lost when the host file was damaged")]
    assert 90 not in good_ones(filled)


@pytest.mark.parametrize("table", ["finding", "outbox"])
def test_a_bad_finding_or_message_is_found_at_start(filled: Path, table: str) -> None:
    """The rest of the outbox must not wait behind a row that cannot be read."""
    column = {"finding": "body = 'x'", "outbox": "payload = x'00'"}[table]
    connection = sqlite3.connect(filled / "journal.sqlite")
    connection.execute(f"UPDATE {table} SET {column} WHERE seq = 30")
    connection.commit()
    connection.close()
    with open_journal(filled) as journal:
        assert any(table in n and "damaged" in n for n in journal.notices)
        assert len(list(journal.findings())) == 30 - (table == "finding")
        assert len(journal.outbox()) == 30 - (table == "outbox")


@pytest.mark.parametrize("how", ["removed", "cut", "flipped"])
def test_a_lost_write_ahead_file_is_noticed(killed: Path, how: str) -> None:
    """Without it the host file is sound and old; only the mark tells that more was acknowledged."""
    wal = killed / "journal.sqlite-wal"
    if how == "removed":
        wal.unlink()
    elif how == "cut":
        wal.write_bytes(wal.read_bytes()[: wal.stat().st_size // 2])
    else:
        flip(wal, wal.stat().st_size // 2)
    kept = wal.read_bytes() if wal.exists() else None
    with open_journal(killed) as journal:
        assert any("write-ahead file is gone or cut" in n for n in journal.notices)
        assert journal.last_seq == 90
        ((first, last, _),) = journal.gaps()
    assert (first > 31, last) == (how != "removed", 90)
    assert sorted(good_ones(killed)) == list(range(1, first))
    if kept is not None:
        (aside,) = (killed / "quarantine").rglob("journal.sqlite-wal")
        assert aside.read_bytes() == kept, "what could not be read is kept as it was"


def test_a_write_ahead_file_without_its_host_file_is_never_applied_to_a_new_one(killed: Path) -> None:
    """SQLite would take the old frames for those of the new file."""
    (killed / "journal.sqlite").unlink()
    (killed / "journal.lock").unlink()
    with open_journal(killed) as journal:
        assert any("without the file that it belongs to" in n for n in journal.notices)
        assert list(journal.facts()) == []
        assert journal.last_seq > 90, "with no mark the numbers go on well above"
    assert list((killed / "quarantine").rglob("journal.sqlite-wal"))


def test_without_a_mark_and_with_an_unreadable_host_file_numbers_jump(filled: Path) -> None:
    """Nothing tells how far the damaged file had come, and no number may mean two facts."""
    (filled / "journal.lock").write_bytes(b"torn")
    (filled / "journal.sqlite").write_bytes(b"rubbish" * 1000)
    with open_journal(filled) as journal:
        assert journal.last_seq > 1 << 32
        assert one_by_one(journal.facts(frame="H1"))
        assert list(journal.commit(Batch(facts=(scans("H1", 0),)))) == [journal.last_seq]
    assert [t for t in verify(filled) if t.kind != NOTE] == []


def test_a_seal_that_was_killed_and_a_damaged_host_file_together_double_nothing(
    filled: Path, small_chunks: int
) -> None:
    """The chunk is in the sealed file, its rows still in the host file, and the host file is rebuilt."""

    class KilledError(Exception):
        pass

    def kill(point: str) -> None:
        if point == "seal.written":
            raise KilledError

    before = good_ones(filled)
    with pytest.raises(KilledError), Journal.open(filled, site="hall-a", hook=kill) as journal:
        journal.seal("H1", whole=False)
    flip(filled / "journal.sqlite", 61)
    assert good_ones(filled) == before
    assert [t for t in verify(filled) if t.kind != NOTE] == []


def test_a_chunk_half_sealed_that_is_wrong_is_left_and_its_rows_sealed_again(
    filled: Path, small_chunks: int
) -> None:
    """Between the two steps of a seal the rows are still the truth."""

    class KilledError(Exception):
        pass

    def kill(point: str) -> None:
        if point == "seal.written":
            raise KilledError

    before = good_ones(filled)
    with pytest.raises(KilledError), Journal.open(filled, site="hall-a", hook=kill) as journal:
        journal.seal("H1", whole=False)
    connection = sqlite3.connect(filled / "tests" / "H1.sqlite")
    connection.execute("UPDATE chunk SET data = x'00' WHERE number = 2")
    connection.commit()
    connection.close()
    with open_journal(filled) as journal:
        assert [s.file for s in journal.seal("H1", whole=False)] == ["H1+2.sqlite"]
    assert good_ones(filled) == before
    flip(filled / "journal.sqlite", 61)
    assert good_ones(filled) == before, "rebuilt from the sealed files: the later part counts"


def test_a_sealed_file_of_another_journal_is_left_alone(filled: Path, folder: Path) -> None:
    """Sequence numbers of two journals mean different facts."""
    with open_journal(folder / "other") as other:
        other.commit(Batch(facts=(scans("H9", 1),)))
        other.seal("H9", whole=False)
    shutil.copy(folder / "other" / "tests" / "H9.sqlite", filled / "tests")
    assert any("H9.sqlite" in t for t in found(filled))
    flip(filled / "journal.sqlite", 61)
    with open_journal(filled) as journal:
        assert any("H9.sqlite" in n and "another journal" in n for n in journal.notices)
        assert "H9" not in journal.frames()


def test_a_damaged_row_stops_its_seal_and_nothing_else(filled: Path) -> None:
    """A row that cannot be read must not leave the host file, where a later start will name it."""
    with open_journal(filled) as journal:
        journal._connection().execute("UPDATE tail SET data = x'00' WHERE seq = 88")
        frame = fact_of(88).frame
        with pytest.raises(JournalDamaged, match="tail row 88"):
            [journal.seal(frame, whole=False) for _ in range(9)]
        journal.commit(Batch(facts=(fact_of(91),)))
        told: list[JournalDamaged] = []
        assert [s for s, _ in journal.facts(after=86, on_damage=told.append)] == [87, 89, 90, 91]
        assert len(told) == 1


# --- files of other versions and other programs -------------------------------------------------


def version_1(folder: Path) -> None:
    """Make a journal as the first version of the format did, with one fact."""
    path = folder / "journal.sqlite"
    path.touch()
    connection = connect(path, "rw")
    prepare_writing(connection)
    migrate(connection, lambda point: None, MIGRATIONS[:1])
    connection.execute("INSERT INTO meta VALUES ('journal', '0123456789abcdef')")
    connection.close()


def test_a_journal_of_the_first_version_is_brought_up_to_date(folder: Path) -> None:
    """An upgrade must not cost a running test its record."""
    version_1(folder)
    with open_journal(folder) as journal:
        assert any(f"from format 1 to {len(MIGRATIONS)}" in n for n in journal.notices)
        assert journal.journal_id == "0123456789abcdef"
        journal.commit(Batch(facts=(scans("H1", 0),), inbox=("e",)))
        assert (journal.taken("e"), journal.gaps()) == (True, [])
    with open_journal(folder) as journal:
        assert not any("format" in n for n in journal.notices)
    assert found(folder) == []


def test_a_migration_that_fails_leaves_the_old_version(folder: Path) -> None:
    """Each migration is one transaction."""
    version_1(folder)
    connection = connect(folder / "journal.sqlite", "rw")
    broken = (*MIGRATIONS[:1], ("CREATE TABLE extra (a)", "CREATE TABLE head (b)"))
    with pytest.raises(sqlite3.OperationalError):
        migrate(connection, lambda point: None, broken)
    assert connection.execute("PRAGMA user_version").fetchone() == (1,)
    assert connection.execute("SELECT 1 FROM sqlite_schema WHERE name = 'extra'").fetchone() is None
    connection.close()


def test_a_journal_of_a_later_version_is_refused_and_left_alone(filled: Path) -> None:
    """An older program must not touch what it does not understand."""
    connection = sqlite3.connect(filled / "journal.sqlite")
    connection.execute("PRAGMA user_version = 99")
    connection.execute("UPDATE meta SET value = '99' WHERE key = 'schema'")
    connection.commit()
    connection.close()
    data = (filled / "journal.sqlite").read_bytes()
    with pytest.raises(JournalError, match="format 99"):
        open_journal(filled)
    with pytest.raises(JournalError, match="format 99"):
        list(verify(filled))
    assert (filled / "journal.sqlite").read_bytes() == data
    assert not (filled / "quarantine").exists()


def test_a_file_of_another_program_is_refused_and_left_alone(folder: Path) -> None:
    """The folder in the settings may be somebody else's."""
    connection = sqlite3.connect(folder / "journal.sqlite")
    connection.execute("CREATE TABLE customers (name)")
    connection.commit()
    connection.close()
    data = (folder / "journal.sqlite").read_bytes()
    with pytest.raises(JournalError, match="another program"):
        open_journal(folder)
    assert (folder / "journal.sqlite").read_bytes() == data


def test_a_reader_waits_out_the_moment_in_which_no_file_has_the_name(filled: Path) -> None:
    """Between the two renames of a replacement there is no host file."""
    host, away = filled / "journal.sqlite", filled / "away"
    with JournalReader(filled) as reader:
        assert reader.last_seq == 90
        host.rename(away)
        back = threading.Timer(0.05, lambda: away.rename(host))
        back.start()
        assert reader.last_seq == 90
        back.join()


def test_readers_follow_a_host_file_that_was_replaced(filled: Path) -> None:
    """A view that was open while a damaged file was put aside must not show the old one for ever."""
    with JournalReader(filled) as reader:
        assert reader.last_seq == 90
        flip(filled / "journal.sqlite", 61)
        with open_journal(filled) as journal:
            fill(journal, 3)
            assert reader.last_seq == 93
            assert reader.has_finding(finding(91).id)
