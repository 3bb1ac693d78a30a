"""The writer's thread: full disks, broken disks, spools that cannot be written, and the passing of time."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq import entries, writer
from daq.core.rules import ChannelRules, Role, Specimen, TestRules, rules_to_json
from daq.engine import Engine
from daq.entries import SPOOL
from daq.inlet import Acked, Inlet
from daq.records import ConditionChanged, EntryMade, Finding, RulesAdopted, ScansTaken, Stamp, Ticked
from daq.store.errors import JournalBroken, JournalDamaged, JournalError, JournalFull
from daq.store.journal import Journal
from daq.writer import Writer

UTC = 17 * 10**12


class Hand:
    """A clock that is moved by hand."""

    speed = 1.0

    def __init__(self) -> None:
        self.now_s = 0.0

    def stamp(self) -> Stamp:
        tick = round(self.now_s * 1e4)
        return Stamp(UTC + tick, tick, "boot")

    def wait_until(self, boot_tick: int, stop: threading.Event) -> bool:
        return stop.is_set()


class Seam:
    """A journal whose ``commit`` and ``seal`` may be made to fail; everything else is the real one."""

    def __init__(self, journal: Journal) -> None:
        self._journal = journal
        self.commit_fails: Callable[[Any], None] = lambda batch: None
        self.seal_fails: Callable[[str], None] = lambda frame: None

    def commit(self, batch: Any) -> Any:
        self.commit_fails(batch)
        return self._journal.commit(batch)

    def seal(self, frame: str) -> Any:
        self.seal_fails(frame)
        return self._journal.seal(frame)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._journal, name)


class Bed:
    """A writer on a real journal, with a clock moved by hand; ``turn`` does one round of its thread."""

    def __init__(self, folder: Path, most: int = 1000) -> None:
        (folder / SPOOL).mkdir()
        self.journal = Journal.open(folder, site="s")
        self.seam = Seam(self.journal)
        self.clock = Hand()
        self.inlet = Inlet(most)
        self.engine = Engine()
        self.lines: list[str] = []
        self.said: list[Finding] = []
        self.stop = threading.Event()
        self.writer = Writer(
            self.seam, self.engine, self.inlet, self.clock, site="s", host_status={},  # type: ignore[arg-type]
            publisher=None, say=self.said.append, line=self.lines.append,
        )  # fmt: skip
        self.writer.take_now([_adopt("H1"), _adopt("H2", "entry")])

    def turn(self) -> None:
        self.writer._turn(self.inlet.take(512, 0.0), self.stop)

    def scan(self, frame: str, celsius: float = 980.0) -> None:
        at = self.clock.stamp()
        self.inlet.scan(
            ScansTaken(
                frame, ("left", "mid"), "boot", np.array([at.utc_tick]), np.array([at.boot_tick]),
                np.array([[0.001, celsius]]), np.zeros((1, 2), np.uint8),
            )
        )  # fmt: skip

    def facts(self, kind: type) -> list[Any]:
        return [f for _, f in self.journal.facts() if isinstance(f, kind)]

    def alarms(self, name: str) -> list[str]:
        return [f.fields["state"] for f in self.said if f.kind == "alarm" and f.fields["alarm"] == name]


def _adopt(frame: str, starts: str = "first_scan") -> RulesAdopted:
    channels = (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("mid", Role.SPECIMEN_TEMPERATURE))
    rules = TestRules(
        "s", frame, frame, Specimen("S-1", "x", 25.0, 6.0), channels,
        set_point_c=980.0, below_k=3.0, above_k=3.0, starts=starts,
    )  # fmt: skip
    return RulesAdopted(Stamp(UTC, 0, "boot"), frame, frame, rules_to_json(rules))


@pytest.fixture
def bed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Bed]:
    monkeypatch.setattr(writer, "RETRY_S", 0.01)
    b = Bed(tmp_path)
    yield b
    b.journal.close()


def _full(times: int) -> Callable[[Any], None]:
    left = [times]

    def fails(batch: Any) -> None:
        if left[0] > 0:
            left[0] -= 1
            raise JournalFull("journal.sqlite: got SQLITE_FULL, wanted room on the disk")

    return fails


def test_a_full_disk_is_told_at_once_and_its_batch_is_written_once_there_is_room(bed: Bed) -> None:
    """Nothing of the batch may be lost or doubled, and a person hears while it lasts."""
    bed.scan("H1")
    bed.seam.commit_fails = _full(3)
    bed.turn()
    assert [line for line in bed.lines if line.startswith("disk_full: ")] == bed.lines[:1]
    assert len(bed.facts(ScansTaken)) == 1
    bed.turn()
    assert bed.alarms("disk_full") == ["unacknowledged"]
    assert "0 scans did not fit" in bed.facts(ConditionChanged)[0].message
    bed.clock.now_s += 60.0
    bed.turn()
    assert bed.alarms("disk_full") == ["unacknowledged", "returned_unacknowledged"]


def test_a_queue_that_filled_up_meanwhile_blocks_nobody_and_the_scans_without_room_are_counted(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The writer once waited for room in the queue that only it empties."""
    monkeypatch.setattr(writer, "RETRY_S", 0.01)
    bed = Bed(tmp_path, most=4)
    bed.scan("H1")

    def fails_until_the_queue_is_full(batch: Any) -> None:
        if bed.inlet.lost < 3:
            bed.clock.now_s += 1.0
            bed.scan("H1")
            bed.inlet.news(Acked((1,)))
            raise JournalFull("full")

    bed.seam.commit_fails = fails_until_the_queue_is_full
    thread = threading.Thread(target=bed.turn, daemon=True)
    thread.start()
    thread.join(5.0)
    assert not thread.is_alive()
    bed.turn()
    bed.turn()
    told = bed.facts(ConditionChanged)
    assert "3 scans did not fit" in told[0].message
    assert [c.active for c in told] == [True, False]
    scans = [int(s.boot_tick[0]) for s in bed.facts(ScansTaken)]
    assert scans == sorted(scans)
    bed.journal.close()


def test_a_disk_that_is_still_full_at_the_end_lets_the_daemon_stop_and_say_so(bed: Bed) -> None:
    """It must stop in time, and not seem to have written."""
    bed.seam.commit_fails = _full(10**9)
    bed.scan("H1")
    thread = threading.Thread(target=bed.writer.run, args=(bed.stop,))
    thread.start()
    time.sleep(0.05)
    bed.stop.set()
    thread.join(5.0)
    assert not thread.is_alive()
    assert bed.writer.broken is not None
    assert "were not written" in bed.writer.broken
    assert bed.facts(ScansTaken) == []


@pytest.mark.parametrize("error", [JournalBroken("disk failed"), ZeroDivisionError("a bug")])
def test_whatever_ends_the_writer_is_said_and_ends_the_daemon(bed: Bed, error: Exception) -> None:
    """A daemon without its writer looks alive and records nothing."""

    def fails(batch: Any) -> None:
        raise error

    bed.seam.commit_fails = fails
    bed.scan("H1")
    bed.writer.run(bed.stop)
    assert bed.writer.broken is not None
    assert str(error) in bed.writer.broken
    assert bed.lines[-1].startswith("journal_trouble: recording ends")


def test_a_status_that_the_journal_refuses_costs_the_status_not_the_facts(bed: Bed) -> None:
    """It would end the daemon, and the next one at the same place."""

    def refuses(batch: Any) -> None:
        if batch.status:
            raise JournalError("status of H1: got NaN, wanted plain JSON values")

    bed.seam.commit_fails = refuses
    bed.writer._status_at = 0.0
    bed.scan("H1")
    bed.turn()
    assert len(bed.facts(ScansTaken)) == 1
    assert "without the newest status" in bed.lines[0]


@pytest.mark.parametrize("error", [JournalFull("full"), JournalDamaged("row 3: other bytes")])
def test_sealing_that_fails_for_one_frame_stops_neither_the_record_nor_the_others(
    bed: Bed, monkeypatch: pytest.MonkeyPatch, error: JournalError
) -> None:
    """A full disk shows first where whole chunks are written; it once ended the writer."""
    monkeypatch.setattr(writer, "SEAL_FROM_ROWS", 1)
    asked: list[str] = []

    def fails(frame: str) -> None:
        asked.append(frame)
        if frame == "H1":
            raise error

    bed.seam.seal_fails = fails
    for _ in range(3):
        bed.scan("H1")
        bed.turn()
    assert {"H1", "H2"} <= set(asked)
    assert len(bed.facts(ScansTaken)) == 3
    bed.turn()
    assert len(bed.alarms("journal_trouble")) == isinstance(error, JournalDamaged)


def test_all_that_waits_is_written_at_the_end(tmp_path: Path) -> None:
    """What buses left in their last moment once stayed in the queue beyond the first 512."""
    bed = Bed(tmp_path, most=3000)
    for _ in range(1500):
        bed.clock.now_s += 1.0
        bed.scan("H1")
    bed.stop.set()
    bed.writer.run(bed.stop)
    assert bed.writer.broken is None
    assert len(bed.facts(ScansTaken)) == 1500
    assert bed.journal.snapshot("H1") is not None
    bed.journal.close()


def test_time_passes_for_a_silent_frame_and_for_the_host_while_others_keep_talking(bed: Bed) -> None:
    """With a scan in every batch no deadline was ever looked at: a lost link was never an alarm."""
    for t, celsius in ((0.0, 980.0), (10.0, 990.0), (100.0, 990.0)):
        bed.clock.now_s = t
        bed.scan("H1", celsius)
        bed.turn()
    bed.inlet.news(ConditionChanged(bed.clock.stamp(), "", "gauge", "link_lost", True, "no answer"))
    bed.turn()
    for _ in range(100):
        bed.clock.now_s += 1.0
        bed.scan("H2")
        bed.turn()
    assert bed.alarms("link_lost") == ["unacknowledged"]
    assert bed.alarms("temperature_high") == ["unacknowledged"]
    raised = {f.fields["alarm"]: f.at_tick - UTC for f in bed.said if f.kind == "alarm"}
    assert raised["link_lost"] == 160 * 10_000
    assert raised["temperature_high"] == 190 * 10_000
    assert [(t.frame, t.stamp.boot_tick) for t in bed.facts(Ticked)] == [("", 1_600_000), ("H1", 1_900_000)]
    again = Engine()
    replayed = [f for _, fact in bed.journal.facts() for f in again.take(fact)]
    order = lambda f: (f.at_tick, f.id)  # noqa: E731
    assert sorted(replayed, key=order) == sorted(bed.said, key=order)


def test_a_spool_that_cannot_be_cleared_is_told_once_and_no_entry_is_taken_twice(
    bed: Bed, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A folder of somebody else's once ended the daemon."""

    def refuses(journal: Path, file: str) -> None:
        raise entries.EntryError(f"{file}: got Permission denied, wanted to remove it")

    monkeypatch.setattr(entries, "forget", refuses)
    entries.write_entry(bed.journal.folder, "H1", "note", "mk", note="once")
    for _ in range(4):
        bed.turn()
    assert len(bed.facts(EntryMade)) == 1
    assert len(bed.facts(ConditionChanged)) == 1


def test_a_spool_that_is_gone_is_told_once_and_the_record_goes_on(bed: Bed) -> None:
    """Entries are not worth the readings."""
    (bed.journal.folder / SPOOL).rmdir()
    for _ in range(3):
        bed.scan("H1")
        bed.turn()
    assert len(bed.facts(ScansTaken)) == 3
    assert [c.condition for c in bed.facts(ConditionChanged)] == ["entry_refused"]


def test_a_load_that_was_told_while_no_daemon_ran_is_dated_by_when_it_was_told(bed: Bed) -> None:
    """Test time would else begin with the daemon's next start."""
    made = time.time_ns() - 600 * 10**9
    path = bed.journal.folder / SPOOL / f"{made:020d}-7.json"
    path.write_text('{"frame":"H2","entry":"loaded","initials":"mk","values":{"minutes_ago":5}}')
    bed.clock.now_s = 3600.0
    bed.turn()
    start = bed.engine.tests["H2"].start
    assert start is not None
    assert abs(start - (UTC + (3600 - 900) * 10_000)) < 20 * 10_000
    assert not path.exists()


def test_an_entry_for_a_frame_there_is_not_is_refused_and_told(bed: Bed) -> None:
    """It would lie in the record, and the person would think it done."""
    entries.write_entry(bed.journal.folder, "H9", "ended", "mk")
    bed.turn()
    assert bed.facts(EntryMade) == []
    assert "'H9', wanted one of H1, H2, host" in bed.facts(ConditionChanged)[0].message
