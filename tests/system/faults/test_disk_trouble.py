"""A full disk is waited for; after a failed write or fsync nothing more is acknowledged."""

from __future__ import annotations

from random import Random
from typing import Any

import pytest
from cut_disk import Disk, Recorder, after_cut, recorded
from kill_cases import check
from power_cases import SKIP_DEAF, laid_out, survives
from store_cases import open_journal, quick_folder
from store_child import batch_of

from daq.store.errors import JournalBroken, JournalError, JournalFull
from daq.store.journal import Journal

pytestmark = [SKIP_DEAF, pytest.mark.usefixtures("small_journal")]


def work(journal: Journal, recorder: Recorder, random: Random, commits: int) -> None:
    """Commit, seal and fold in at random, as long as the disk bears it."""
    for _ in range(commits):
        batch = batch_of(journal.last_seq + 1, random.choice((1, 2, 5, 9)))
        recorder.say("begun", journal.last_seq + len(batch.facts))
        recorder.say("acknowledged", journal.commit(batch).stop - 1)
        if random.random() < 0.25:
            journal.seal(whole=False)
        if random.random() < 0.15:
            journal.checkpoint()


def until_it_fails(journal: Journal, recorder: Recorder, random: Random) -> JournalError:
    """Work on until the disk does not bear it; return the error."""
    for _ in range(300):
        try:
            work(journal, recorder, random, 1)
        except JournalError as error:
            return error
    raise AssertionError("the disk's trouble was never met")


@pytest.mark.parametrize("what", ["write", "sync"])
def test_after_a_disk_error_nothing_is_acknowledged_that_is_not_on_the_disk(faults: Any, what: str) -> None:
    """After a failed fsync the pages are marked clean: a file that looks well may not be on the disk.

    So the process that met the error must stop, the next one must not build on what it finds in
    memory, and a power cut at any later moment must find everything that either of them acknowledged.
    """
    for seed in range(faults.seed, faults.seed + faults.errors):
        random = Random(seed)
        with quick_folder() as root, recorded(root, random) as recorder, open_journal(root / "j") as journal:
            work(journal, recorder, random, random.randint(0, 8))
            recorder.failing[what] = random.randrange(12)
            met = until_it_fails(journal, recorder, random)
            assert isinstance(met, JournalBroken), f"seed {seed}: {met}"
            found = Disk.read_from(root)  # killed here: what the next process finds
            before = recorder.so_far()
            recorder.failing.clear()  # and what a second try would meet
            assert isinstance(until_it_fails(journal, recorder, random), JournalBroken)
        acked, begun = before.said("acknowledged"), before.said("begun")
        assert acked == recorder.said("acknowledged")
        with (
            laid_out(found) as root,
            recorded(root, random, before) as after,
            open_journal(root / "j") as journal,
        ):
            assert journal.last_seq in (max(acked, default=0), begun[-1]), f"seed {seed}"
            after.say("acknowledged", journal.last_seq)
            after.say("begun", journal.last_seq)
            after.say("opened")
            work(journal, after, random, random.randint(1, 8))
        opened = max(i for i, note in enumerate(after.notes) if note[:2] == ("said", "opened"))
        # not while the next process is still opening: two faults within a moment can cost a snapshot
        for upto in (random.randint(opened + 1, len(after.notes)) for _ in "123"):
            acked, begun = after.said("acknowledged", upto), after.said("begun", upto)
            last = max(acked, default=0)
            try:
                survives(after_cut(after, upto, random), last, begun[-1], replaced=False)
            except (AssertionError, JournalError) as error:
                raise AssertionError(f"again with: --fault-seed {seed} --errors 1") from error
        faults.count(4, f"a {what} fails", "stopped, nothing acknowledged is lost")


def test_a_full_disk_is_waited_for_and_loses_nothing(faults: Any) -> None:
    """The state before the transaction stands; the batch, still the caller's, goes in when there is room."""
    for seed in range(faults.seed, faults.seed + faults.errors):
        random = Random(seed)
        with quick_folder() as root, recorded(root, random) as recorder, open_journal(root / "j") as journal:
            work(journal, recorder, random, random.randint(0, 8))
            recorder.room = random.randrange(60_000)
            met = until_it_fails(journal, recorder, random)
            acked = max(recorder.said("acknowledged"), default=0)
            assert isinstance(met, JournalFull), f"seed {seed}: {met}"
            assert check(journal, acked) == acked, f"seed {seed}"
            cut = after_cut(recorder, len(recorder.notes), random)
            survives(cut, acked, max(recorder.said("begun"), default=0), replaced=False)
            recorder.room = None
            work(journal, recorder, random, 3)
            assert check(journal, acked) > acked, f"seed {seed}"
        faults.count(3, "a file cannot grow", "waited, went on, nothing lost")
