"""The engine's thread: takes what happened, concludes, commits both in one transaction, hands on.

Only what is committed leaves the house. Everything that arrived while the last commit
waited for the disk goes into the next one, so one fsync serves all buses however many there are.

A full disk is survived: the batch is kept and tried again, what arrives meanwhile waits in
a bounded queue, and the alarm goes out from memory. A broken disk is not: an fsync error is
final, nothing more is acknowledged, and the process ends for its service manager to restart.
"""

from __future__ import annotations

import sys
import threading
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any, Final

from daq import __version__, entries
from daq.clock import Clock
from daq.codec import decode_fact
from daq.engine import HOST, Engine
from daq.publish import Publisher, rows_for
from daq.records import ConditionChanged, EntryMade, Fact, Finding, Ticked
from daq.store.committer import Gather
from daq.store.errors import JournalBroken, JournalBusy, JournalError, JournalFull
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


@dataclass(frozen=True, slots=True)
class Acked:
    """Outbox rows that the broker has acknowledged; travels through the same queue as facts."""

    rows: tuple[int, ...]


class Writer:
    """Owns the engine and the journal. ``run`` is the body of its thread."""

    def __init__(
        self,
        journal: Journal,
        engine: Engine,
        gather: Gather[Any],
        clock: Clock,
        *,
        site: str,
        host_status: dict[str, object],
        publisher: Publisher | None,
        say: Callable[[Finding], None],
    ) -> None:
        self._journal = journal
        self._engine = engine
        self._gather = gather
        self._clock = clock
        self._site = site
        self._host_status = host_status
        self._publisher = publisher
        self._say = say
        self._status_at = 0.0
        self._snapshot_at = time.monotonic() + SNAPSHOT_EVERY_S
        self._round = 0
        self._offered = 0
        self._tail_rows = 0
        self._curves: dict[str, Any] = {}
        self.beat = 0
        self.broken: str | None = None
        self.committed_facts = 0

    def run(self, stop: threading.Event) -> None:
        """Work until ``stop`` is set, then write what is left and a last snapshot."""
        try:
            while not stop.is_set():
                self._turn(self._gather.take(TAKE_MOST, IDLE_S), stop)
            self._turn(self._gather.take(TAKE_MOST, 0.0), stop, last=True)
        except JournalBroken as error:
            self.broken = str(error)
            self._alarm_from_memory("journal_trouble", str(error))
            stop.set()

    def take_now(self, facts: Iterable[Fact]) -> None:
        """Take facts before the thread runs (rules, the start itself), in one commit."""
        self._write(list(facts), [], threading.Event())

    def _turn(self, items: list[Fact | Acked], stop: threading.Event, *, last: bool = False) -> None:
        acked = tuple(row for item in items if isinstance(item, Acked) for row in item.rows)
        facts: list[Fact] = [item for item in items if not isinstance(item, Acked)]
        taken: list[str] = []
        for entry in entries.read_entries(self._journal.folder):
            if isinstance(entry, entries.EntryError):
                facts.append(
                    ConditionChanged(self._clock.stamp(), HOST, "spool", "entry_refused", True, str(entry))
                )
            elif self._journal.taken(entry.file):
                entries.forget(self._journal.folder, entry.file)
            else:
                taken.append(entry.file)
                stamp = self._clock.stamp()
                facts.append(
                    EntryMade(stamp, entry.frame, entry.entry, entry.initials, dict(entry.values), entry.note)
                )
        if not facts:
            facts = self._ticks()
        if facts or acked or last or time.monotonic() >= self._status_at:
            self._write(facts, taken, stop, acked, last=last)
        self.beat += 1

    def _ticks(self) -> list[Fact]:
        """A tick for every frame that has a deadline behind it, since no fact came to bring the time."""
        now = self._clock.stamp()
        due: list[Fact] = []
        for frame in self._engine.frames:
            at = self._engine.next_deadline(frame)
            if at is not None and at <= now.boot_tick:
                due.append(Ticked(now, frame))
        return due

    def _write(
        self,
        facts: list[Fact],
        taken: list[str],
        stop: threading.Event,
        acked: tuple[int, ...] = (),
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
        self._commit(
            Batch(tuple(coded), tuple(findings), tuple(rows), acked, tuple(snapshots), status, tuple(taken)),
            stop,
        )
        self.committed_facts += len(facts)
        for file in taken:
            entries.forget(self._journal.folder, file)
        for finding in findings:
            self._say(finding)
        self._hand_on(bool(rows), status)
        self._tail_rows += len(facts)
        if self._tail_rows >= SEAL_FROM_ROWS:
            self._tail_rows = 0
            self._journal.seal()

    def _keep_curves(self, status: dict[str, dict[str, Any]]) -> None:
        """A status replaces the one before, so it carries the last curve along when it has no new one."""
        for name, told in status.items():
            if "curve" in told:
                self._curves[name] = told["curve"]
            elif name in self._curves:
                told["curve"] = self._curves[name]

    def _commit(self, batch: Batch, stop: threading.Event) -> None:
        """Commit; while the disk is full keep the batch and try again until told to stop."""
        told = False
        while True:
            try:
                self._journal.commit(batch)
            except (JournalFull, JournalBusy) as error:
                if not told:
                    self._alarm_from_memory("disk_full", str(error))
                    told = True
                self.beat += 1
                if stop.wait(RETRY_S):
                    raise
                continue
            except JournalBroken:
                raise
            except JournalError as error:
                raise JournalBroken(str(error)) from error
            if told:
                lost = self._gather.pressure().refused
                message = f"recording again; {lost} scans did not fit into memory meanwhile"
                stamp = self._clock.stamp()
                for active in (True, False):
                    self._gather.put(ConditionChanged(stamp, HOST, "journal", "disk_full", active, message))
            return

    def _hand_on(self, rows: bool, status: dict[str, dict[str, Any]]) -> None:
        if self._publisher is None:
            return
        if rows:
            news: list[OutboxRow] = self._journal.outbox(after=self._offered)
            if news:
                self._offered = news[-1].seq
                self._publisher.offer(news)
        for name, told in status.items():
            self._publisher.status(name, {k: v for k, v in told.items() if k != "curve"})

    def _alarm_from_memory(self, alarm: str, message: str) -> None:
        """Say on the terminal and on the broker what cannot be written down."""
        print(f"upturn: {alarm}: {message}", file=sys.stderr, flush=True)
        if self._publisher is not None:
            self._publisher.unrecorded(alarm, message)
