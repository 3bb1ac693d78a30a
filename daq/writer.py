"""The engine's thread: takes what happened, concludes, commits both in one transaction, hands on.

Only what is committed leaves the house. Everything that arrived while the last commit
waited for the disk goes into the next one, so one fsync serves all buses however many there are.

A full disk is survived: the batch is kept and tried again, what arrives meanwhile waits in
a bounded queue, and the alarm goes out from memory. A broken disk is not: an fsync error is
final, nothing more is acknowledged, and the process ends for its service manager to restart.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterable, Sequence
from typing import Any, Final

from daq import __version__
from daq.clock import Clock
from daq.codec import decode_fact
from daq.door import Door
from daq.engine import HOST, Engine
from daq.inlet import Acked, Aside, Inlet, Item
from daq.publish import Publisher, rows_for
from daq.records import TICKS_PER_S, ConditionChanged, Fact, Finding, ScansTaken, Stamp, Ticked
from daq.store.errors import JournalBroken, JournalBusy, JournalDamaged, JournalError, JournalFull
from daq.store.journal import Journal
from daq.store.rows import Batch, OutboxRow, Snapshot, encoded

TAKE_MOST: Final = 512
IDLE_S: Final = 0.25
"""Longest wait for a fact before the spool and the deadlines are looked at."""
RETRY_S: Final = 1.0
SNAPSHOT_EVERY_S: Final = 300.0
STATUS_EVERY_S: Final = 1.0
CURVE_EVERY: Final = 5
"""A curve goes with every fifth status: it changes slowly and is the bulk of the bytes."""
SEAL_FROM_ROWS: Final = 4096
OFFER_MOST: Final = 1000
"""Rows handed on after a commit; the publisher reads the outbox for itself where there are more."""
WAL_MOST: Final = 64 << 20
"""Bytes of the write-ahead file from which it counts as growing."""
TICK_SLACK_S: Final = 1.0
"""A scan on its way may still belong before a deadline: a frame's tick waits for it so long [real s]."""


class Writer:
    """Owns the engine and the journal. ``run`` is the body of its thread."""

    def __init__(
        self,
        journal: Journal,
        engine: Engine,
        inlet: Inlet,
        clock: Clock,
        *,
        site: str,
        host_status: dict[str, object],
        publisher: Publisher | None,
        say: Callable[[Finding], None],
        line: Callable[[str], None],
    ) -> None:
        self._journal = journal
        self._engine = engine
        self._inlet = inlet
        self._clock = clock
        self._site = site
        self._host_status = host_status
        self._publisher = publisher
        self._say = say
        self._line = line
        self._door = Door(journal.folder, clock, journal.taken)
        self._status_at = 0.0
        self._snapshot_at = time.monotonic() + SNAPSHOT_EVERY_S
        self._round = 0
        self._offered = 0
        self._tail_rows = 0
        self._curves: dict[str, Any] = {}
        self._ticked: dict[str, int] = {}
        self._unsealed: set[str] = set()
        self._aside: set[int] = set()
        self._wal_grows = False
        self.beat = 0
        self.broken: str | None = None
        self.committed_facts = 0

    def run(self, stop: threading.Event) -> None:
        """Work until ``stop`` is set, then write all that is left and a last snapshot.

        Whatever ends it otherwise is in ``broken``; the process must then end as well.
        """
        try:
            while not stop.is_set():
                self._turn(self._inlet.take(TAKE_MOST, IDLE_S), stop)
            while items := self._inlet.take(TAKE_MOST, 0.0):
                self._turn(items, stop)
            self._turn([], stop, last=True)
        except JournalError as error:
            self.broken = str(error)
        except Exception as error:  # without its writer the house must not seem to record
            self.broken = f"fault of this program: {type(error).__name__}: {error}"
        if self.broken is not None:
            self._alarm_from_memory("journal_trouble", f"recording ends: {self.broken}")

    def take_now(self, facts: Iterable[Fact]) -> None:
        """Take facts before the thread runs (rules, the start itself), in one commit."""
        self._write(list(facts), [], threading.Event())

    def _turn(self, items: list[Item], stop: threading.Event, *, last: bool = False) -> None:
        acked = tuple(row for item in items if isinstance(item, Acked) for row in item)
        facts: list[Fact] = [item for item in items if not isinstance(item, Acked | Aside)]
        aside = [item for item in items if isinstance(item, Aside) and self._new_aside(item)]
        facts += [self._told_aside(item) for item in aside]
        entered, files = self._door.look(tuple(self._engine.tests))
        facts += entered
        facts += self._ticks(facts)
        if facts or acked or last or time.monotonic() >= self._status_at:
            self._write(facts, files, stop, acked, [(item.seq, item.why) for item in aside], last=last)
        self.beat += 1

    def _new_aside(self, item: Aside) -> bool:
        """Whoever reads the outbox before the commit meets the same row again: it is told once."""
        new = item.seq not in self._aside
        self._aside.add(item.seq)
        return new

    def _told_aside(self, item: Aside) -> Fact:
        message = f"set aside: {item.why}"
        return ConditionChanged(self._clock.stamp(), HOST, "outbox", "message_damaged", True, message)

    def _ticks(self, facts: list[Fact]) -> list[Fact]:
        """A tick for every frame that has a deadline behind it and that no fact here brings the time to.

        It is stamped with the deadline itself, so that a scan that is still on its way comes after it.
        """
        moved = {fact.frame for fact in facts}
        if any(not isinstance(fact, ScansTaken) for fact in facts):
            moved.add(HOST)
        now = self._clock.stamp()
        slack = round(TICK_SLACK_S * self._clock.speed * TICKS_PER_S)
        due: list[Fact] = []
        for frame in self._engine.frames:
            at = self._engine.next_deadline(frame)
            if at is None or frame in moved or at == self._ticked.get(frame):
                continue
            if at + (0 if frame == HOST else slack) <= now.boot_tick:
                self._ticked[frame] = at
                utc_tick = now.utc_tick - (now.boot_tick - at)
                due.append(Ticked(Stamp(utc_tick, at, now.boot_id), frame))
        return due

    def _write(
        self,
        facts: list[Fact],
        files: list[str],
        stop: threading.Event,
        acked: tuple[int, ...] = (),
        aside: Sequence[tuple[int, str]] = (),
        *,
        last: bool = False,
    ) -> None:
        coded = [encoded(fact) for fact in facts]
        findings: list[Finding] = []
        for fact in coded:
            findings += self._engine.take(decode_fact(fact.data))  # what a replay will see, to the bit
        rows = [row for f in findings for row in rows_for(f, self._site)]
        now = time.monotonic()
        snapshots: list[Snapshot] = []
        if last or now >= self._snapshot_at:
            self._snapshot_at = now + SNAPSHOT_EVERY_S
            snapshots = [Snapshot(key, None, __version__, data) for key, data in self._engine.snapshots()]
        status: dict[str, dict[str, Any]] = {}
        if last or now >= self._status_at:
            self._status_at = now + STATUS_EVERY_S
            self._round += 1
            status = self._engine.status(with_curve=last or self._round % CURVE_EVERY == 1)
            status[HOST] |= self._host_status | {"now_tick": self._clock.stamp().utc_tick}
            self._keep_curves(status)
            self._watch_log()
        self._commit(
            Batch(
                tuple(coded),
                tuple(findings),
                tuple(rows),
                acked,
                tuple(snapshots),
                status,
                tuple(files),
                tuple(aside),
            ),
            stop,
        )
        self.committed_facts += len(facts)
        self._inlet.news_all(self._door.forget(files))
        for finding in findings:
            self._say(finding)
        self._hand_on(bool(rows), status)
        self._tail_rows += len(facts)
        if self._tail_rows >= SEAL_FROM_ROWS:
            self._tail_rows = 0
            self._seal()

    def _keep_curves(self, status: dict[str, dict[str, Any]]) -> None:
        """A status replaces the one before, so it carries the last curve along when it has no new one."""
        for name, told in status.items():
            if "curve" in told:
                self._curves[name] = told["curve"]
            elif name in self._curves:
                told["curve"] = self._curves[name]

    def _commit(self, batch: Batch, stop: threading.Event) -> None:
        """Commit; while the disk is full keep the batch and try again until told to stop.

        Raises:
            JournalBroken: the disk failed, or it was still full when it was time to stop.
        """
        trouble = ""
        lost = self._inlet.lost
        while True:
            try:
                self._commit_once(batch)
            except (JournalFull, JournalBusy) as error:
                if not trouble:
                    trouble = "disk_full" if isinstance(error, JournalFull) else "journal_trouble"
                    self._alarm_from_memory(trouble, str(error))
                self.beat += 1
                if stop.wait(RETRY_S):
                    raise JournalBroken(
                        f"{error}; {len(batch.facts)} facts and all that came after them were not written"
                    ) from error
                continue
            if trouble:
                lost = self._inlet.lost - lost
                message = f"recording again; {lost} scans did not fit into memory meanwhile"
                stamp = self._clock.stamp()
                for active in (True, False):
                    self._inlet.news(ConditionChanged(stamp, HOST, "journal", trouble, active, message))
            return

    def _commit_once(self, batch: Batch) -> None:
        """Commit ``batch``; where the journal refuses what it holds, the facts at least."""
        try:
            self._journal.commit(batch)
        except (JournalFull, JournalBusy, JournalBroken, JournalDamaged):
            raise
        except JournalError as error:
            self._alarm_from_memory("journal_trouble", f"written without the newest status: {error}")
            without = Batch(
                batch.facts, batch.findings, batch.outbox, batch.acked, inbox=batch.inbox, aside=batch.aside
            )
            self._journal.commit(without)

    def _seal(self) -> None:
        """Move whole chunks to their sealed files. It is housekeeping: what fails is tried again later."""
        for frame in (*self._journal.frames(), HOST):
            try:
                self._journal.seal(frame)
                self._unsealed.discard(frame)
            except (JournalFull, JournalBusy):
                continue  # a commit will say so where it matters
            except JournalBroken:
                raise
            except JournalError as error:
                if frame not in self._unsealed:
                    self._unsealed.add(frame)
                    message = f"the record of {frame or 'the host'} stays in the host file: {error}"
                    self._inlet.news(
                        ConditionChanged(
                            self._clock.stamp(), HOST, f"seal {frame}", "journal_trouble", True, message
                        )
                    )

    def _hand_on(self, rows: bool, status: dict[str, dict[str, Any]]) -> None:
        if self._publisher is None:
            return
        if rows:
            try:
                news = self.backlog(self._offered, OFFER_MOST)
            except JournalDamaged as error:  # the rows are committed: a start in better times sends them
                self._line(f"journal_trouble: {error}")
                news = []
            if news:
                self._offered = news[-1].seq
                self._publisher.offer(news)
        for name, told in status.items():
            self._publisher.status(name, {k: v for k, v in told.items() if k != "curve"})

    def backlog(self, after: int, most: int) -> list[OutboxRow]:
        """Return what waits for the broker, in order; a damaged row is set aside. From any thread."""
        return self._journal.outbox(
            after=after, limit=most, on_damage=lambda seq, why: self._inlet.news(Aside(seq, why))
        )

    def _watch_log(self) -> None:
        """A reader that holds an old state open keeps the write-ahead file from being folded in."""
        grown = self._journal.wal_bytes
        growing = grown > (WAL_MOST if not self._wal_grows else WAL_MOST // 2)
        if growing != self._wal_grows:
            self._wal_grows = growing
            message = f"the journal's write-ahead file holds {grown >> 20} MB"
            stamp = self._clock.stamp()
            self._inlet.news(ConditionChanged(stamp, HOST, "journal", "wal_growing", growing, message))

    def _alarm_from_memory(self, alarm: str, message: str) -> None:
        """Say in the log and on the broker what cannot be written down."""
        self._line(f"{alarm}: {message}")
        if self._publisher is not None:
            self._publisher.unrecorded(alarm, message)
