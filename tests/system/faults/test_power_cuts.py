"""After a power cut every acknowledged scan is there unaltered, and at most the open batch is lost."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from pathlib import Path
from random import Random
from typing import Any

import pytest
from cut_disk import Disk, Recorder, after_cut, as_written, recorded
from power_cases import SKIP_DEAF, laid_out, survives
from store_cases import finding, open_journal, quick_folder
from store_child import batch_of, fact_of, write

from daq.codec import encode_finding
from daq.store.errors import JournalError
from daq.store.rows import checksum, encoded
from daq.store.schema import (
    HOST_FILE,
    MIGRATIONS,
    connect,
    create_private,
    make_folder,
    migrate,
    prepare_writing,
    transaction,
)
from daq.store.verify import NOTE, verify

LIVES = 5
"""Power cuts that go into one record."""
FIRST, MIGRATION, REPLACED = "first start", "migration", "replacement of a damaged file"

pytestmark = [SKIP_DEAF, pytest.mark.usefixtures("small_journal")]


def live(folder: Path, seed: int, commits: int) -> Recorder:
    """Let the store work in ``folder`` for some commits; return the record of what reached its files."""
    random = Random(seed)
    with recorded(folder, random) as recorder:
        write(
            folder / "j", seed, commits, recorder.say,
            begun=lambda last: recorder.say("begun", last),
            acknowledged=lambda last: recorder.say("acknowledged", last),
        )  # fmt: skip
    return recorder


def first_disk(how: str, random: Random) -> tuple[Disk, int]:
    """Return the disk that a series begins with, and the last number acknowledged there."""
    if how == FIRST:
        return Disk(), 0
    with quick_folder() as folder:
        if how == MIGRATION:
            return of_an_older_version(folder, random)
        last = live(folder, random.randrange(1 << 30), 6).said("acknowledged")[-1]
        with closing(sqlite3.connect(folder / "j" / HOST_FILE)) as connection:
            connection.execute("PRAGMA user_version = 7")  # no longer what the table inside says
        return Disk.read_from(folder), last


def of_an_older_version(folder: Path, random: Random) -> tuple[Disk, int]:
    """Return a disk with a host file as an older program left it: what it wrote is said here in full."""
    host = folder / "j" / HOST_FILE
    make_folder(host.parent)
    create_private(host)
    with closing(connect(host, "rw")) as connection:
        prepare_writing(connection)
        migrate(connection, lambda point: None, MIGRATIONS[: random.randrange(1, len(MIGRATIONS))])
        with transaction(connection):
            connection.execute("INSERT INTO meta VALUES ('journal', 'abcd'), ('site', 'hall-a')")
        last = 0
        for _ in range(random.randint(1, 8)):
            first, last = last + 1, last + random.choice((1, 2, 9))
            with transaction(connection):
                commit_of_old(connection, first, last)
        if random.random() < 0.5:  # ended by a kill: the write-ahead file is still there
            return Disk.read_from(folder), last
    return Disk.read_from(folder), last


def commit_of_old(connection: sqlite3.Connection, first: int, last: int) -> None:
    """Write the facts ``first`` to ``last`` and what goes with them, as format 1 had it."""
    for seq in range(first, last + 1):
        e = encoded(fact_of(seq))
        row = (seq, e.frame, e.kind, checksum(e.data, seq, e.frame, e.kind), e.data)
        connection.execute("INSERT INTO tail (seq, frame, kind, checksum, data) VALUES (?, ?, ?, ?, ?)", row)
    connection.execute("UPDATE head SET last_seq = ?", (last,))
    f, state = finding(last), str(last).encode()
    body = encode_finding(f)
    connection.execute(
        "INSERT INTO finding (id, test, kind, checksum, body) VALUES (?, ?, ?, ?, ?)",
        (f.id, f.frame, f.kind, checksum(body.encode(), f.id), body),
    )
    about = (f"m{last}", "t", 0, None)
    connection.execute(
        "INSERT INTO outbox (id, topic, retain, expires_s, checksum, payload) VALUES (?, ?, ?, ?, ?, ?)",
        (*about, checksum(state, *about), state),
    )
    connection.execute(
        "INSERT INTO snapshot VALUES ('H1', ?, '0.1.0', ?, ?)",
        (last, checksum(state, "H1", last, "0.1.0"), state),
    )
    connection.execute("INSERT OR REPLACE INTO status VALUES ('last', ?)", (str(last),))


def cut_anywhere(recorder: Recorder, random: Random) -> tuple[int, str]:
    """Return how many notes come before the cut, and in what it falls; half fall in the opening."""
    notes = recorder.notes
    opened = next(i for i, n in enumerate(notes) if n[:2] == ("said", "opened"))
    closing = next((i for i, n in enumerate(notes) if n[:2] == ("said", "closing")), len(notes))
    upto = random.randint(0, opened) if random.random() < 0.4 else random.randint(0, len(notes))
    return upto, "opening" if upto <= opened else "work" if upto <= closing else "closing"


def series(seed: int, lives: int, faults: Any) -> None:
    """Cut the power of one record again and again, each life beginning where the cut before left it."""
    random = Random(seed)
    how = random.choice((FIRST, FIRST, MIGRATION, REPLACED))
    disk, last = first_disk(how, random)
    for number in range(lives):
        with laid_out(disk) as root:
            recorder = live(root, random.randrange(1 << 30), random.choice((0, 1, 3, 10, 30)))
        upto, where = cut_anywhere(recorder, random)
        acked = max([last, *recorder.said("acknowledged", upto)])
        begun = max([last, *recorder.said("begun", upto)])
        disk = after_cut(recorder, upto, random)
        last = survives(disk, acked, begun, replaced=how == REPLACED)
        where = how if where == "opening" and number == 0 else where
        faults.count(
            2,
            f"in {where}",
            "nothing open"
            if acked == begun
            else "the open batch kept"
            if last == begun
            else "the open batch lost",
        )


def test_a_power_cut_anywhere_loses_nothing_acknowledged(faults: Any) -> None:
    """Only fsynced bytes survive, the last write torn; also in first start, migration and recovery."""
    for i in range(0, faults.cuts, LIVES):
        seed = faults.seed + i // LIVES
        try:
            series(seed, min(LIVES, faults.cuts - i), faults)
        except (AssertionError, JournalError, sqlite3.Error) as error:
            raise AssertionError(f"again with: --fault-seed {seed} --cuts {LIVES}") from error


@pytest.mark.parametrize("how", [FIRST, MIGRATION, REPLACED])
def test_a_power_cut_at_every_moment_of_an_opening_is_got_over(faults: Any, how: str) -> None:
    """Files are made, renamed and changed in place there, in steps of which each relies on the one before.

    A host file is made through a rollback journal; whoever only reads cannot undo what is half done.
    """
    disk, last = first_disk(how, Random(3))
    with laid_out(disk) as root:
        recorder = live(root, 1, 0)
    opened = next(i for i, n in enumerate(recorder.notes) if n[:2] == ("said", "opened"))
    for seed in range(faults.seed, faults.seed + each_moment(faults)):
        for upto in range(opened + 1):
            end = survives(
                after_cut(recorder, upto, Random(seed << 20 | upto)), last, last, replaced=how == REPLACED
            )
            assert end == last, f"again with: --fault-seed {seed} --cuts 50"
            faults.count(2, f"at every moment of: {how}", "nothing lost")


def test_a_power_cut_at_every_moment_of_making_an_archive_is_got_over(faults: Any) -> None:
    """A sealed file leaves the write-ahead mode when its test is over, also through a rollback journal."""
    with quick_folder() as root, recorded(root, Random(1)) as recorder, open_journal(root / "j") as j:
        j.commit(batch_of(1, 9))
        begun = len(recorder.notes)
        while j.seal("H1", whole=False, finish=True):
            pass
        ended = len(recorder.notes)
    for seed in range(faults.seed, faults.seed + each_moment(faults)):
        for upto in range(begun, ended + 1):
            survives(after_cut(recorder, upto, Random(seed << 20 | upto)), 9, 9, replaced=False)
            faults.count(2, "at every moment of: making an archive", "nothing lost")


def each_moment(faults: Any) -> int:
    """Return how many disks are tried for each moment of a short work: one in the short run."""
    return max(1, int(faults.cuts) // 50)


def test_the_record_of_a_run_tells_all_of_it() -> None:
    """A cut is only as true as the record: with nothing cut, it must give the very files that are there."""
    with quick_folder() as folder:
        for seed in (1, 2):  # a first start, then one that goes on
            recorder = live(folder, seed, 60)
            there = Disk.read_from(folder)
            told = as_written(recorder)
            assert told.files.keys() == there.files.keys()
            assert [n for n in told.files if told.files[n] != there.files[n]] == []
            assert told.folders == there.folders
        kinds = {note[0] for note in recorder.notes}
        assert kinds >= {"made", "wrote", "truncated", "synced", "removed", "folder synced"}
        assert [t for t in verify(folder / "j") if t.kind != NOTE] == []
