"""The journal's everyday work: commit, read, and come back after a restart."""

from __future__ import annotations

import os
import stat
from pathlib import Path

import pytest
from store_cases import as_bytes, entry, finding, scans, started

from daq.codec import encode_fact
from daq.records import Finding
from daq.store.errors import JournalBusy, JournalError
from daq.store.journal import Journal, JournalReader
from daq.store.rows import Batch, EncodedFact, OutboxNew, Snapshot, encoded


@pytest.fixture
def journal(tmp_path: Path) -> Journal:
    return Journal.open(tmp_path / "j", site="hall-a")


def test_facts_come_back_in_the_order_of_their_commit(journal: Journal) -> None:
    """A replay must see what the engine saw, whether the fact came as an object or as bytes."""
    facts = [
        scans("H1", 0),
        entry("H1", 1),
        scans("H2", 1),
        started(2),
        scans("H1", 2),
    ]
    assert list(journal.commit(Batch(facts=tuple(facts[:2])))) == [1, 2]
    done = journal.commit(Batch(facts=tuple(encoded(f) for f in facts[2:])))
    assert (done.seqs, done.start, done.stop, done[0], len(done)) == (range(3, 6), 3, 6, 3, 3)
    wanted = as_bytes(list(enumerate(facts, 1)))
    assert as_bytes(list(journal.facts())) == wanted
    assert [s for s, _ in journal.facts(frame="H1")] == [1, 2, 4, 5]
    assert [s for s, _ in journal.facts(frame="H2", after=3)] == [4]
    assert [s for s, _ in journal.facts(after=1, upto=3)] == [2, 3]
    assert [s for s, _ in journal.facts(frame="")] == [4]
    assert journal.frames() == ["H1", "H2"]
    journal.close()


def test_a_restart_goes_on_where_the_record_ended(tmp_path: Path) -> None:
    """Sequence numbers are never given twice, and everything committed is there."""
    with Journal.open(tmp_path, site="hall-a") as journal:
        journal.commit(
            Batch(
                facts=(scans("H1", 0),), findings=(finding(1),), outbox=(OutboxNew("a", "t/a", b"1"),),
                snapshots=(Snapshot("H1", None, "0.1.0", b"state"),), status={"H1": {"stage": "primary"}},
                inbox=("entry-1.json",),
            )
        )  # fmt: skip
    with Journal.open(tmp_path, site="hall-a") as journal:
        assert journal.last_seq == 1
        assert journal.commit(Batch(facts=(scans("H1", 1),))).seqs == range(2, 3)
        assert [f.id for _, f in journal.findings()] == [finding(1).id]
        assert journal.has_finding(finding(1).id)
        assert not journal.has_finding("other")
        assert [(r.seq, r.id, r.payload) for r in journal.outbox()] == [(1, "a", b"1")]
        assert journal.snapshot("H1") == Snapshot("H1", 1, "0.1.0", b"state")
        assert journal.snapshot("H2") is None
        assert journal.status() == {"H1": {"stage": "primary"}}
        assert journal.taken("entry-1.json")
        assert not journal.taken("entry-2.json")


def test_a_finding_is_taken_once_by_id(journal: Journal) -> None:
    """A rebuild concludes again what was concluded before; nothing may be published twice for it."""
    journal.commit(Batch(findings=(finding(1), finding(2))))
    changed = Finding(finding(1).id, 99, None, "H1", "stage", {"k": "changed"})
    done = journal.commit(Batch(findings=(changed, finding(3))))
    assert done.refused == (finding(1).id,)
    assert [f for _, f in journal.findings()] == [finding(1), finding(2), finding(3)]
    journal.close()


def test_findings_are_chosen_by_test_and_kind(journal: Journal) -> None:
    """A view of one test must not read those of all others."""
    made = [finding(1), finding(2, "H2"), finding(3, "H1", "alarm"), finding(4, "H1/a")]
    journal.commit(Batch(findings=tuple(made)))
    assert [f.id for _, f in journal.findings(test="H1")] == [made[0].id, made[2].id]
    assert [f.id for _, f in journal.findings(kinds=("alarm",))] == [made[2].id]
    assert [n for n, _ in journal.findings(after=2)] == [3, 4]
    journal.close()


def test_more_findings_than_one_page_come_back_complete(journal: Journal) -> None:
    """Reading goes page by page; none may fall between two pages."""
    journal.commit(Batch(findings=tuple(finding(k) for k in range(2500))))
    assert [f.at_tick for _, f in journal.findings()] == list(range(2500))
    journal.close()


def test_messages_wait_in_order_until_acknowledged(journal: Journal) -> None:
    """The outbox is the only place an alarm lives between its commit and the broker's word."""
    news = tuple(
        OutboxNew(f"m{k}", "t", bytes([k]), retain=k == 1, expires_s=60 if k else None) for k in range(4)
    )
    journal.commit(Batch(outbox=news))
    assert [r.id for r in journal.outbox(limit=2)] == ["m0", "m1"]
    assert [r.id for r in journal.outbox(after=2)] == ["m2", "m3"]
    assert journal.outbox()[1].retain
    assert journal.outbox()[1].expires_s == 60
    journal.commit(Batch(acked=(1, 3)))
    assert [r.id for r in journal.outbox()] == ["m1", "m3"]
    done = journal.commit(Batch(outbox=(OutboxNew("m0", "t", b"again"), OutboxNew("", "s", b"x"))))
    assert done.undelivered == ("m0",)
    assert [r.id for r in journal.outbox()] == ["m1", "m3", ""]
    journal.close()


def test_messages_without_an_id_never_refuse_each_other(journal: Journal) -> None:
    """A retained state replaces the one before; it carries no id."""
    journal.commit(Batch(outbox=(OutboxNew("", "s", b"1"), OutboxNew("", "s", b"2"))))
    assert [r.payload for r in journal.outbox()] == [b"1", b"2"]
    journal.close()


def test_an_entry_is_taken_once_even_if_its_file_is_still_there(journal: Journal) -> None:
    """Killed between the commit and the removal of the spool file, the daemon meets the file again."""
    journal.commit(Batch(facts=(entry("H1", 1),), inbox=("e1.json",)))
    with pytest.raises(JournalError, match=r"e1\.json"):
        journal.commit(Batch(facts=(entry("H1", 1),), inbox=("e1.json",)))
    assert journal.last_seq == 1
    assert journal.commit(Batch(facts=(entry("H1", 2),), inbox=("e2.json",))).seqs == range(2, 3)
    journal.close()


def test_only_the_newest_snapshots_stay_and_a_damaged_one_is_passed_over(journal: Journal) -> None:
    """A snapshot is a short cut; the one before it serves as well, a wrong one never."""
    for k in range(6):
        journal.commit(Batch(facts=(scans("H1", k),), snapshots=(Snapshot("H1", None, f"v{k}", bytes([k])),)))
    connection = journal._connection()
    assert connection.execute("SELECT count(*) FROM snapshot").fetchone() == (3,)
    assert journal.snapshot("H1") == Snapshot("H1", 6, "v5", b"\x05")
    assert journal.snapshot("H1", engine="v4") == Snapshot("H1", 5, "v4", b"\x04")
    assert journal.snapshot("H1", engine="v0") is None
    connection.execute("UPDATE snapshot SET data = x'63' WHERE seq = 6")
    assert journal.snapshot("H1") == Snapshot("H1", 5, "v4", b"\x04")
    journal.close()


def test_a_batch_that_fails_leaves_nothing_behind(journal: Journal) -> None:
    """Facts, findings and messages come together or not at all."""
    journal.commit(Batch(inbox=("taken",)))
    with pytest.raises(JournalError):
        journal.commit(
            Batch(
                facts=(scans("H1", 0),),
                findings=(finding(1),),
                outbox=(OutboxNew("m", "t", b""),),
                inbox=("taken",),
            )
        )
    assert (journal.last_seq, list(journal.findings()), journal.outbox()) == (0, [], [])
    journal.close()


def test_an_empty_batch_writes_nothing(journal: Journal) -> None:
    """An idle engine costs no fsync."""
    before = journal.wal_bytes
    assert list(journal.commit(Batch())) == []
    assert journal.wal_bytes == before
    journal.close()


def test_a_second_writer_is_refused_naming_the_first(tmp_path: Path) -> None:
    """Two writers would interleave their sequence numbers."""
    with Journal.open(tmp_path, site="hall-a"):
        with pytest.raises(JournalBusy, match=f"process {os.getpid()} since 2"):
            Journal.open(tmp_path, site="hall-a")
        with pytest.raises(JournalBusy, match=f"process {os.getpid()} since 2"):
            Journal.open(tmp_path, site="hall-a")
    Journal.open(tmp_path, site="hall-a").close()


def test_a_closed_journal_says_so(journal: Journal) -> None:
    """A late call in a shutdown must not look like a disk error."""
    journal.close()
    journal.close()
    with pytest.raises(JournalError, match="closed journal"):
        journal.commit(Batch(facts=(scans("H1", 0),)))
    with pytest.raises(JournalError, match="closed journal"):
        list(journal.facts())


def test_files_are_private_by_default(tmp_path: Path) -> None:
    """Readings and initials of people are nobody else's business unless the user says so."""
    mask = os.umask(0)
    try:
        with Journal.open(tmp_path / "a" / "b", site="hall-a") as journal:
            journal.commit(Batch(facts=(scans("H1", 0),)))
            journal.seal(whole=False)
            journal.commit(Batch(facts=(scans("H1", 1),)))
            modes = {p.name: stat.S_IMODE(p.stat().st_mode) for p in (tmp_path / "a").rglob("*")}
    finally:
        os.umask(mask)
    assert {name: oct(mode) for name, mode in modes.items() if mode & 0o077} == {}
    assert {"b", "tests", "journal.sqlite", "journal.sqlite-wal", "journal.lock", "H1.sqlite"} <= modes.keys()


def test_another_site_is_noticed(tmp_path: Path) -> None:
    """A wrong folder in the settings would mix two halls in one record."""
    Journal.open(tmp_path, site="hall-a").close()
    with Journal.open(tmp_path, site="hall-b") as journal:
        assert any("'hall-a'" in n and "'hall-b'" in n for n in journal.notices)


def test_an_old_sqlite_is_noticed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Before 3.51.3 two connections that write or checkpoint can damage a write-ahead file."""
    for version, noticed in (((3, 51, 2), True), ((3, 51, 3), False)):
        monkeypatch.setattr("sqlite3.sqlite_version_info", version)
        with Journal.open(tmp_path, site="hall-a") as journal:
            assert any("only the daemon may write" in n for n in journal.notices) == noticed
            assert journal.sqlite_version


def test_a_reader_sees_what_is_committed_and_cannot_write(tmp_path: Path) -> None:
    """View, report and export are other processes and change nothing."""
    with Journal.open(tmp_path, site="hall-a") as journal, JournalReader(tmp_path) as reader:
        assert reader.last_seq == 0
        journal.commit(Batch(facts=(scans("H1", 0),), status={"H1": 1}))
        assert (reader.last_seq, reader.status(), reader.frames()) == (1, {"H1": 1}, ["H1"])
        with pytest.raises(Exception, match="readonly"):
            reader._connection().execute("DELETE FROM tail")
    with pytest.raises(JournalError, match="closed reader"):
        reader.status()


def test_a_reader_without_a_journal_says_so(tmp_path: Path) -> None:
    """The most likely mistake is a wrong folder."""
    with JournalReader(tmp_path) as reader, pytest.raises(JournalError, match="no such file"):
        reader.status()


def test_a_reader_outlives_the_writer_and_follows_the_next(tmp_path: Path) -> None:
    """A view stays open over a restart of the daemon."""
    first = Journal.open(tmp_path, site="hall-a")
    first.commit(Batch(facts=tuple(scans("H1", k) for k in range(3))))
    with JournalReader(tmp_path) as reader:
        stream = reader.facts(frame="H1")
        assert next(stream)[0] == 1
        first.close()
        assert [seq for seq, _ in stream] == [2, 3]
        second = Journal.open(tmp_path, site="hall-a")
        second.commit(Batch(facts=(scans("H1", 3),)))
        assert reader.last_seq == 4
        second.close()


def test_raw_bytes_are_stored_as_given(journal: Journal) -> None:
    """The engine encodes once; the journal must not encode again."""
    data = encode_fact(scans("H1", 5))
    journal.commit(Batch(facts=(EncodedFact("H1", "ScansTaken", data),)))
    assert journal._connection().execute("SELECT data FROM tail").fetchone() == (data,)
    journal.close()
