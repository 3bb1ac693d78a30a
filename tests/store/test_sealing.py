"""Sealing moves facts to another file and changes nothing about them."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from store_cases import entry, one_by_one, open_journal, quick_folder, scans, started

from daq.codec import encode_fact
from daq.records import BurstTaken, Fact, ScansTaken
from daq.store import chunks, segments
from daq.store.errors import JournalDamaged
from daq.store.journal import Journal, JournalReader
from daq.store.rows import Batch, EncodedFact, encoded
from daq.store.segments import file_name, part_name, sealed_facts
from daq.store.verify import verify, verify_sealed


def put(journal: Journal, *facts: Fact) -> None:
    journal.commit(Batch(facts=facts))


def test_only_whole_chunks_move_until_a_test_ends(folder: Path, small_chunks: int) -> None:
    """A chunk of one scan would cost more than the row it replaces."""
    with open_journal(folder) as journal:
        put(journal, *(scans("H1", k) for k in range(small_chunks - 1)))
        assert journal.seal() == []
        put(journal, *(scans("H1", k) for k in range(small_chunks - 1, small_chunks + 5)))
        (sealed,) = journal.seal()
        assert (sealed.first_seq, sealed.last_seq, sealed.scans, sealed.readings) == (1, 20, 20, 60)
        assert journal.seal() == []
        (rest,) = journal.seal("H1", whole=False)
        assert (rest.number, rest.first_seq, rest.last_seq) == (2, 21, 25)
        assert journal.seal("H1", whole=False) == []
        assert [(seq, len(f)) for seq, f in journal.facts()] == [(20, 20), (25, 5)]
        assert list(verify(folder)) == []


def test_facts_in_bytes_are_sealed_whether_or_not_their_scans_are_counted(
    folder: Path, small_chunks: int
) -> None:
    """Counting only spares a look; a missing count must not keep a chunk in the host file."""
    with open_journal(folder) as journal:
        put(journal, scans("H1", 0))
        assert journal.seal() == []
        journal.commit(Batch(facts=(EncodedFact("H1", "ScansTaken", encode_fact(scans("H1", 1, 19))),)))
        assert [s.scans for s in journal.seal()] == [20]
        put(journal, scans("H1", 20, 10))
        assert journal.seal() == []
        journal.commit(Batch(facts=(encoded(scans("H1", 30, 10)),)))
        assert [s.scans for s in journal.seal()] == [20]


def test_a_block_that_does_not_fit_waits_for_the_next_chunk(folder: Path, small_chunks: int) -> None:
    """Blocks are joined, never split: a committed fact stays one."""
    with open_journal(folder) as journal:
        put(journal, scans("H1", 0, 15), scans("H1", 15, 15), scans("H1", 30, 50), scans("H1", 80))
        assert [s.scans for _ in range(4) for s in journal.seal("H1")] == [15, 15, 50]
        assert [(seq, len(f)) for seq, f in journal.facts()] == [(1, 15), (2, 15), (3, 50), (4, 1)]


def test_scans_are_joined_only_where_nothing_lies_between(folder: Path, small_chunks: int) -> None:
    """A replay must meet an entry, a clock step or a change of channels exactly where they happened."""
    other = ScansTaken(
        "H1",
        ("left",),
        "boot-1",
        *(scans("H1", 9).utc_tick,) * 2,
        np.ones((1, 1)),
        np.zeros((1, 1), np.uint8),
    )
    with open_journal(folder) as journal:
        put(
            journal, started(0), scans("H1", 0), scans("H2", 0), scans("H1", 1), entry("H2", 1),
            scans("H1", 2), entry("H1", 2), scans("H1", 3), started(4), scans("H1", 4),
            scans("H1", 5, boot="boot-2"), other,
        )  # fmt: skip
        before = one_by_one(journal.facts(frame="H1"))
        journal.seal("H1", whole=False)
        kinds = [(seq, type(f).__name__) for seq, f in journal.facts(frame="H1")]
        assert kinds == [
            (1, "EngineStarted"), (6, "ScansTaken"), (7, "EntryMade"), (8, "ScansTaken"),
            (9, "EngineStarted"), (10, "ScansTaken"), (11, "ScansTaken"), (12, "ScansTaken"),
        ]  # fmt: skip
        assert one_by_one(journal.facts(frame="H1")) == before


def test_reading_may_begin_and_end_inside_a_chunk(folder: Path, small_chunks: int) -> None:
    """A snapshot lies at any number; the facts after it are wanted, no more and no fewer."""
    with open_journal(folder) as journal:
        put(journal, *(scans("H1", 3 * k, 3) for k in range(8)))
        whole = list(journal.facts())
        journal.seal("H1", whole=False)
        for after in range(9):
            for upto in range(9):
                cut = one_by_one(journal.facts(after=after, upto=upto))
                assert cut == one_by_one([(s, f) for s, f in whole if after < s <= upto])


def test_a_sealed_file_tells_its_story_without_the_journal(folder: Path, small_chunks: int) -> None:
    """An archive of one test is one file: facts of the host that concern it are in it too."""
    with open_journal(folder) as journal:
        put(
            journal,
            started(0),
            *(scans("H1", k) for k in range(30)),
            entry("H1", 1),
            started(1),
            scans("H1", 30),
        )
        put(journal, scans("H2", 0), started(2))
        wanted = one_by_one((s, f) for s, f in journal.facts(frame="H1") if s <= 34)
        while journal.seal("H1", into="H1 S-1", whole=False, finish=True):
            pass
        path = folder / "tests" / "H1 S-1.sqlite"
        assert one_by_one(sealed_facts(path)) == wanted
        assert list(verify_sealed(path)) == []
        assert [p.name for p in path.parent.iterdir()] == ["H1 S-1.sqlite"], "finished: one plain file"
        assert list(verify(folder)) == []


def test_the_hosts_facts_leave_the_host_file_last(
    folder: Path, small_chunks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A frame whose rows are still to be sealed will want the host's facts between them."""
    monkeypatch.setattr(chunks, "CHUNK_ROWS", 2)
    with open_journal(folder) as journal:
        put(journal, started(0), started(1), scans("H1", 0), started(2), started(3), scans("H1", 1))
        before = one_by_one(journal.facts())
        assert [(s.file, s.last_seq) for s in journal.seal("")] == [("@host.sqlite", 2)]
        assert journal.seal("") == []
        while journal.seal("H1", whole=False):
            pass
        assert [(s.first_seq, s.last_seq) for s in journal.seal("")] == [(4, 5)]
        assert one_by_one(journal.facts()) == before
        assert list(verify(folder)) == []


def test_tests_of_one_frame_go_to_files_of_their_own(folder: Path, small_chunks: int) -> None:
    """A frame outlives its specimens."""
    with open_journal(folder) as journal:
        put(journal, *(scans("H1", k) for k in range(25)))
        first_ends = journal.last_seq
        put(journal, *(scans("H1", k) for k in range(25, 50)))
        files = []
        while done := journal.seal("H1", into="H1 S-1", upto=first_ends, whole=False):
            files += [s.file for s in done]
        while done := journal.seal("H1", into="H1 S-2", whole=False):
            files += [s.file for s in done]
        assert files == ["H1 S-1.sqlite"] * 2 + ["H1 S-2.sqlite"] * 2
        assert one_by_one(journal.facts()) == [encode_fact(scans("H1", k)) for k in range(50)]
        assert list(verify(folder)) == []


def test_any_name_makes_a_file_of_its_own() -> None:
    """Names come from a laboratory's own numbering and may hold anything."""
    names = ["H1", "h/1", "../x", ".hidden", "H1+2", "ü 1", "", "@host", "H1.sqlite"]
    files = [file_name(n) for n in names]
    assert len(set(files)) == len(names)
    assert all("/" not in f and not f.startswith(".") and f.count(".") == 1 for f in files)
    assert part_name("H1.sqlite") == "H1+2.sqlite"
    assert part_name("H1+2.sqlite") == "H1+3.sqlite"


def test_a_damaged_sealed_file_is_left_alone_and_a_new_part_begun(folder: Path, small_chunks: int) -> None:
    """What can still be read of a damaged file must not be written over."""
    with open_journal(folder) as journal:
        put(journal, *(scans("H1", k) for k in range(20)))
        journal.seal()
        journal.close()
        path = folder / "tests" / "H1.sqlite"
        path.write_bytes(b"no database" * 500)
        kept = path.read_bytes()
    with open_journal(folder) as journal:
        put(journal, *(scans("H1", k) for k in range(20, 40)))
        (sealed,) = journal.seal()
        assert sealed.file == "H1+2.sqlite"
        assert any("H1.sqlite" in n and "new part" in n for n in journal.notices)
        assert path.read_bytes() == kept
        put(journal, *(scans("H1", k) for k in range(40, 60)))
        assert [s.file for s in journal.seal()] == ["H1+2.sqlite"]
        told: list[JournalDamaged] = []
        rest = one_by_one(journal.facts(frame="H1", on_damage=told.append))
        assert rest == [encode_fact(scans("H1", k)) for k in range(20, 60)]
        assert [str(path) in str(t) for t in told] == [True]
        with pytest.raises(JournalDamaged, match=r"H1\.sqlite"):
            list(journal.facts(frame="H1"))


def test_a_file_of_another_frame_is_not_written_to(folder: Path, small_chunks: int) -> None:
    """Two frames under one test's name would mix two specimens in one archive."""
    with open_journal(folder) as journal:
        put(journal, scans("H1", 0), scans("H2", 0))
        journal.seal("H1", into="S-1", whole=False)
        (sealed,) = journal.seal("H2", into="S-1", whole=False)
        assert sealed.file == "S-1+2.sqlite"
        assert len(list(journal.facts())) == 2


def test_what_packing_would_alter_stays_in_its_own_bytes(
    folder: Path, small_chunks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A chunk is read again before its rows go; if a bit differs the rows are kept as they were."""
    wrong = scans("H1", 7)

    def broken(fact: Fact) -> bytes:
        return encode_fact(wrong if isinstance(fact, ScansTaken) and len(fact) > 1 else fact)

    with open_journal(folder) as journal:
        put(journal, *(scans("H1", k) for k in range(20)))
        before = one_by_one(journal.facts())
        monkeypatch.setattr(chunks, "encode_fact", broken)
        journal.seal()
        monkeypatch.undo()
        assert one_by_one(journal.facts()) == before
        assert list(verify(folder)) == []
        with sqlite3.connect(folder / "tests" / "H1.sqlite") as connection:
            assert connection.execute("SELECT codec FROM chunk").fetchall() == [(chunks.AS_THEY_WERE,)]
        connection.close()


def test_a_burst_is_sealed_as_it_is(folder: Path, small_chunks: int) -> None:
    """Full-rate readings around a rupture are the only record of it."""
    burst = BurstTaken(scans("H1", 100, 500), "rupture")
    with open_journal(folder) as journal:
        put(journal, scans("H1", 0), burst, scans("H1", 1))
        journal.seal("H1", whole=False)
        assert [encode_fact(f) for _, f in journal.facts()] == [
            encode_fact(scans("H1", 0)), encode_fact(burst), encode_fact(scans("H1", 1)),
        ]  # fmt: skip


def test_a_reader_loses_and_repeats_nothing_while_the_writer_seals(
    folder: Path, small_chunks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A report that runs for an hour meets rows that have moved meanwhile."""
    monkeypatch.setattr("daq.store.reading.PAGE", 7)
    with open_journal(folder) as journal, JournalReader(folder) as reader:
        put(journal, *(f for k in range(60) for f in (scans("H1", k), scans("H2", k), started(k))))
        wanted = {f: one_by_one(journal.facts(frame=f)) for f in ("H1", "H2")}
        every = one_by_one(journal.facts())
        streams = {f: reader.facts(frame=f) for f in ("H1", "H2")}
        merged = reader.facts()
        got: dict[str, list[tuple[int, Fact]]] = {"H1": [], "H2": [], "all": []}
        for step in range(40):
            for f, stream in streams.items():
                got[f] += [x for _, x in zip(range(3), stream, strict=False)]
            got["all"] += [x for _, x in zip(range(4), merged, strict=False)]
            if step % 5 == 0:
                journal.seal(("H1", "H2")[step // 5 % 2])
        for f, stream in streams.items():
            got[f] += list(stream)
            assert one_by_one(got[f]) == wanted[f]
        got["all"] += list(merged)
        assert sorted(one_by_one(got["all"])) == sorted(every)


def test_a_reader_in_the_way_delays_neither_a_seal_nor_its_end(folder: Path, small_chunks: int) -> None:
    """A report that reads a test's file must not hold up the engine, nor keep its chunks from the file."""
    with open_journal(folder) as journal, JournalReader(folder) as reader:
        put(journal, scans("H1", 0))
        journal.seal("H1", whole=False)
        assert len(list(reader.facts())) == 1
        for k in range(1, 4):
            put(journal, scans("H1", k, 20))
            journal.seal("H1")
        assert journal.seal("H1", finish=True) == []
        path = folder / "tests" / "H1.sqlite"
        alone = folder / "alone.sqlite"
        alone.write_bytes(path.read_bytes())
        assert len(list(sealed_facts(alone))) == 4, "the chunks are in the file itself"
        assert len(list(reader.facts())) == 4
        reader.close()
        assert journal.seal("H1", finish=True) == []
        assert [p.name for p in path.parent.iterdir()] == ["H1.sqlite"]


def test_a_sealed_file_can_be_read_from_a_disk_that_cannot_be_written(
    folder: Path, small_chunks: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An archive lies on a read-only medium; no index of a write-ahead file can be made there."""
    with open_journal(folder) as journal:
        put(journal, scans("H1", 0))
        journal.seal("H1", whole=False)
    plain = segments.connect

    def read_only_disk(path: Path, mode: str, *, immutable: bool = False) -> sqlite3.Connection:
        if not immutable:
            raise sqlite3.OperationalError("unable to open database file")
        return plain(path, mode, immutable=True)

    monkeypatch.setattr(segments, "connect", read_only_disk)
    assert len(list(sealed_facts(folder / "tests" / "H1.sqlite"))) == 1


# --- any interleaving -----------------------------------------------------------------------

VALUES = st.one_of(
    st.floats(width=64, allow_nan=False), st.just(float("nan")), st.just(-0.0),
    st.integers(-10_000, 10_000).map(lambda k: k / 1000),
)  # fmt: skip
TICKS = st.integers(-(2**40), 2**40)


@st.composite
def any_scans(draw: st.DrawFn) -> ScansTaken:
    n = draw(st.sampled_from([0, 1, 1, 1, 2, 5, 18]))
    channels = draw(st.sampled_from([("a", "b"), ("a", "b"), ("a",)]))
    shape = (n, len(channels))
    seed = draw(st.integers(0, 2**32))
    rng = np.random.default_rng(seed)
    values = rng.normal(size=shape).round(draw(st.sampled_from([3, 20])))
    for _ in range(min(n, 2)):
        values[rng.integers(n), rng.integers(shape[1])] = draw(VALUES)
    utc = draw(TICKS) + rng.integers(-3, 10, n).cumsum()
    quality = rng.choice(np.array([0, 0, 0, 3, 64], np.uint8), shape)
    boot = draw(st.sampled_from(["boot-1", "boot-1", "boot-2"]))
    frame = draw(st.sampled_from(["H1", "H1", "H2/a"]))
    return ScansTaken(frame, channels, boot, utc, utc + draw(st.integers(-5, 5)), values, quality)


FACTS = st.one_of(
    any_scans(), any_scans(), any_scans(),
    st.builds(entry, st.sampled_from(["H1", "H2/a"]), st.integers(0, 99)),
    st.builds(started, st.integers(0, 99)),
)  # fmt: skip
STEPS = st.one_of(
    st.lists(FACTS, min_size=1, max_size=12),
    st.tuples(st.sampled_from(["H1", "H2/a", "", None]), st.booleans(), st.sampled_from([None, "S-1"])),
    st.just("reopen"),
)


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(steps=st.lists(STEPS, min_size=2, max_size=16), cut=st.integers(0, 60))
def test_any_interleaving_gives_back_the_same_facts_in_the_same_order(
    steps: list[object], cut: int, small_chunks: int
) -> None:
    """Commits, seals and restarts in any order: each frame's record is as it was committed, to the bit."""
    committed: list[tuple[int, Fact]] = []
    with quick_folder() as path:
        journal = open_journal(path)
        for step in steps:
            if isinstance(step, list):
                put(journal, *step)
                committed += [(len(committed) + k, f) for k, f in enumerate(step, 1)]
            elif isinstance(step, tuple):
                frame, whole, into = step
                journal.seal(frame, whole=whole, into=into if frame == "H1" else None)
            else:
                journal.close()
                journal = open_journal(path)
        assert list(verify(path)) == []
        for frame in ("H1", "H2/a"):
            own = [(s, f) for s, f in committed if f.frame in (frame, "")]
            assert one_by_one(journal.facts(frame=frame)) == one_by_one(own)
            late = [(s, f) for s, f in own if s > cut]
            assert one_by_one(journal.facts(frame=frame, after=cut)) == one_by_one(late)
            early = [(s, f) for s, f in own if s <= cut]
            assert one_by_one(journal.facts(frame=frame, upto=cut)) == one_by_one(early)
        seqs = [s for s, _ in journal.facts()]
        assert seqs == sorted(seqs)
        assert sorted(one_by_one(journal.facts())) == sorted(one_by_one(committed))
        journal.close()
