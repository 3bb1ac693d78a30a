"""Wires the live house together and keeps it until told to stop.

    buses -> assembler -> queue -> writer (engine, journal) -> publisher
                                     ^ spool folder              ^ acknowledgements come back

The main thread supervises: readiness, watchdog, clock steps, signals. It owns no data.
"""

from __future__ import annotations

import contextlib
import os
import signal
import sys
import threading
import time
from collections import defaultdict
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from types import FrameType
from typing import Any, Final

from daq import __version__
from daq.acquire import Assembler, Bus, Layout, Polling
from daq.bench import Bench
from daq.broker import EmbeddedBroker
from daq.clock import Clock
from daq.core.rules import rules_to_json
from daq.engine import HOST, Engine
from daq.entries import SPOOL
from daq.lines import plain_line
from daq.publish import Publisher
from daq.records import (
    TICKS_PER_S,
    ClockStepped,
    ConditionChanged,
    EngineStarted,
    Fact,
    Finding,
    RecordError,
    RulesAdopted,
    ScansTaken,
    UpturnError,
)
from daq.settings import Instrument, Lab
from daq.store.committer import Gather
from daq.store.journal import Journal
from daq.supervise import Supervisor, notify
from daq.writer import Acked, Writer
from drivers import registry

QUEUE_MOST: Final = 100_000
"""Scans that wait in memory while the disk is full: a day of one frame a second, some 30 MB."""
LOOK_EVERY_S: Final = 0.5
LATE_S: Final = 1.0
"""A scan waits for an instrument at least this long beyond its instant [real s], a period at least."""
STOP_S: Final = 5.0
CLOCK_STEP_S: Final = 1.0
"""A change of UTC against the boot clock from which it counts as set, not as slewed [real s]."""


class DaemonError(UpturnError):
    """The daemon cannot start as asked; the message says what to change."""


def recover(journal: Journal, say: Callable[[str], None]) -> tuple[Engine, int | None]:
    """Rebuild the engine from the newest valid snapshot and the facts after it.

    Returns the engine and the UTC tick at which the record ended (None in a new journal). With
    another version's snapshots, or a damaged one, everything is rebuilt from the facts.
    """
    engine = Engine()
    after = 0
    host = journal.snapshot(HOST, __version__)
    if host is not None and host.seq is not None:
        try:
            engine.restore(HOST, host.data)
            for name in engine.wanted:
                own = journal.snapshot(name, __version__)
                if own is None or own.seq != host.seq:
                    raise RecordError(f"snapshot {name!r}: wanted one of fact {host.seq}")
                engine.restore(name, own.data)
            after = host.seq
        except RecordError as error:
            say(f"rebuilding from the first fact: {error}")
            engine, after = Engine(), 0
    new: list[Finding] = []
    for _, fact in journal.facts(after=after, on_damage=lambda trouble: say(f"left out: {trouble}")):
        new += [f for f in engine.take(fact) if not journal.has_finding(f.id)]
    if new:
        # a later version may conclude more from the same facts: kept as findings, never published again
        from daq.store.rows import Batch

        journal.commit(Batch(findings=tuple(new)))
        say(f"version {__version__} concludes {len(new)} findings more; they are kept, not published")
    ends = [s.clock.latest + s.clock.utc_lead for s in engine.tests.values()]
    return engine, max(ends, default=None)


@dataclass
class House:
    """Everything that runs, so that it can be stopped in order."""

    lab: Lab
    clock: Clock
    stop: threading.Event = field(default_factory=threading.Event)
    threads: list[threading.Thread] = field(default_factory=list)

    def thread(self, name: str, target: Callable[[threading.Event], None]) -> None:
        t = threading.Thread(target=target, args=(self.stop,), name=name, daemon=True)
        self.threads.append(t)
        t.start()


def run(lab: Lab, *, seconds: float | None = None, view: bool = False) -> int:
    """Run the daemon for ``lab`` until SIGTERM, SIGINT, ``seconds`` or a broken disk; return the exit code.

    Raises:
        JournalBusy: another daemon holds the journal.
        DaemonError, BenchError, SettingsError: it cannot start as asked.
    """
    with Journal.open(lab.journal, site=lab.site) as journal:
        log = _Log(lab.journal / "daemon.log" if view else None)
        (lab.journal / SPOOL).mkdir(mode=0o700, exist_ok=True)
        for notice in journal.notices:
            log.line(f"journal: {notice}")
        bench = Bench(lab)
        broker = None
        try:
            bench.start()
            if lab.broker is not None and lab.broker.embedded:
                broker = EmbeddedBroker(lab.broker.port)
                broker.start()
            return _live(lab, journal, bench, log, seconds, view)
        finally:
            bench.stop()
            if broker is not None:
                broker.stop()
            log.close()


def _live(lab: Lab, journal: Journal, bench: Bench, log: _Log, seconds: float | None, view: bool) -> int:
    clock = bench.clock
    house = House(lab, clock)
    gather: Gather[Fact | Acked] = Gather(QUEUE_MOST)
    engine, ended = recover(journal, log.line)

    def trouble(condition: str, active: bool, message: str) -> None:
        gather.put(ConditionChanged(clock.stamp(), HOST, "broker", condition, active, message))

    def acked(rows: Sequence[int]) -> None:
        gather.put(Acked(tuple(rows)))

    def arrived(scan: ScansTaken) -> None:
        gather.put(scan, 0.0)  # a poll loop never waits for the disk: what finds no room is counted and told

    publisher = None
    if lab.broker is not None:
        publisher = Publisher(lab.broker, site=lab.site, on_acked=acked, on_trouble=trouble)
    told = {"site": lab.site, "speed": clock.speed, "emulated": lab.bench is not None, "pid": os.getpid()}
    writer = Writer(
        journal, engine, gather, clock, site=lab.site, host_status=told, publisher=publisher, say=log.finding
    )
    writer.take_now(_first_facts(lab, engine, clock, ended))
    if publisher is not None:
        publisher.start(lambda after, limit: journal.outbox(after=after, limit=limit))
    supervisor = Supervisor()
    assembler = Assembler(_layouts(lab), arrived)
    house.thread("writer", writer.run)
    supervisor.watch("writer", lambda: writer.beat, 30.0)
    if publisher is not None:
        supervisor.watch("publisher", lambda: publisher.beat, 30.0)
    buses = _buses(lab, bench.instruments, clock, assembler, gather)
    for bus in buses:
        house.thread(f"bus {bus.name}", bus.run)
        supervisor.watch(f"bus {bus.name}", lambda bus=bus: bus.beat, bus.longest_turn_s)  # type: ignore[misc]
    notify(f"READY=1\nSTATUS=watching {len(lab.frames)} frames")
    child = _start_view(lab) if view else None
    code = _supervise(house, supervisor, assembler, gather, seconds, log, child)
    notify("STOPPING=1")
    house.stop.set()
    end = time.monotonic() + STOP_S - 1.0
    for t in reversed(house.threads):  # buses first, then the writer with what they left
        t.join(max(0.1, end - time.monotonic()))
    if publisher is not None:
        publisher.stop(1.0)
    return 74 if writer.broken is not None else code


def _first_facts(lab: Lab, engine: Engine, clock: Clock, ended: int | None) -> Iterator[Fact]:
    stamp = clock.stamp()
    yield EngineStarted(stamp, __version__, ended)
    for frame in lab.frames:
        for rules in frame.tests:
            text = rules_to_json(rules)
            known = engine.tests.get(rules.test)
            if known is None or known.rules != text:
                yield RulesAdopted(stamp, frame.name, rules.test, text)


def _layouts(lab: Lab) -> list[Layout]:
    return [
        Layout(
            f.name,
            f.columns,
            tuple(f.sources[c] for c in f.columns),
            max(1, round(f.scan_every_s * TICKS_PER_S)),
        )
        for f in lab.frames
    ]


def _buses(
    lab: Lab,
    instruments: tuple[Instrument, ...],
    clock: Clock,
    assembler: Assembler,
    gather: Gather[Fact | Acked],
) -> list[Bus]:
    """One bus for each port; instruments that share a port take turns on it."""

    def news(instrument: str, condition: str, active: bool, message: str) -> None:
        frames = sorted({f.name for f in lab.frames if any(i == instrument for i, _ in f.sources.values())})
        text = f"{instrument} ({', '.join(frames)}): {message}"
        gather.put(ConditionChanged(clock.stamp(), HOST, instrument, condition, active, text))

    by_port: dict[str, list[Polling]] = defaultdict(list)
    for i in instruments:
        period = max(1, round(i.poll_s * TICKS_PER_S))
        make = _maker(i)
        by_port[i.port or i.name].append(Polling(i.name, make, period))
    return [Bus(port, polled, clock, assembler.deliver, news) for port, polled in by_port.items()]


def _maker(i: Instrument) -> Callable[[], Any]:
    return lambda: registry.create(i.driver, i.options)


def _supervise(
    house: House,
    supervisor: Supervisor,
    assembler: Assembler,
    gather: Gather[Fact | Acked],
    seconds: float | None,
    log: _Log,
    child: Any,
) -> int:
    """Look after everything about twice a second until it is time to stop."""
    wake = threading.Event()

    def on_signal(number: int, frame: FrameType | None) -> None:
        house.stop.set()
        wake.set()

    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, on_signal)
    signal.signal(signal.SIGHUP, signal.SIG_IGN)  # a closed terminal must not end a six-month test
    clock = house.clock
    began = time.monotonic()
    first = clock.stamp()
    lead = first.utc_tick - first.boot_tick
    period = max((f.scan_every_s for f in house.lab.frames), default=1.0)
    grace = int(max(period, LATE_S * clock.speed) * TICKS_PER_S)
    while not house.stop.is_set():
        wake.wait(min(LOOK_EVERY_S, max(0.05, period / clock.speed / 2)))
        now = clock.stamp()
        step = now.utc_tick - now.boot_tick - lead
        if abs(step) / TICKS_PER_S / clock.speed > CLOCK_STEP_S:
            lead += step
            gather.put(ClockStepped(now, step))
        assembler.overdue(now.boot_tick - grace, now)
        for name, stalled in supervisor.look():
            log.line(f"{name}: {'no progress for too long' if stalled else 'moves again'}")
            if name.startswith("bus "):
                message = f"{name} hangs" if stalled else f"{name} moves again"
                gather.put(ConditionChanged(now, HOST, name, "link_lost", stalled, message))
        if child is not None and child.poll() is not None:
            child = None
            log.to_terminal(
                f"The view is closed; recording goes on. Ctrl-C stops it; "
                f"`upturn watch {house.lab.journal}` opens the view again."
            )
        if seconds is not None and time.monotonic() - began >= seconds:
            break
    if child is not None:
        child.terminate()
        child.wait(2.0)
    return 0


def _start_view(lab: Lab) -> Any:
    import subprocess

    return subprocess.Popen([sys.executable, "-m", "daq.cli", "watch", str(lab.journal)])


class _Log:
    """Plain lines: to stdout, or to a file in the journal folder while the view has the terminal."""

    def __init__(self, path: Path | None) -> None:
        self._file = None if path is None else path.open("a", encoding="utf-8")

    def line(self, text: str) -> None:
        self._write(f"{time.strftime('%Y-%m-%dT%H:%M:%SZ', time.gmtime())} upturn: {text}")

    def finding(self, f: Finding) -> None:
        self._write(plain_line(f))

    def to_terminal(self, text: str) -> None:
        """The view has gone: from here on lines go to the terminal again."""
        self.close()
        self.line(text)

    def _write(self, text: str) -> None:
        out = self._file or sys.stdout
        with contextlib.suppress(OSError):  # a full log disk or a closed pipe must not stop the recording
            print(text, file=out, flush=True)

    def close(self) -> None:
        if self._file is not None:
            self._file.close()
            self._file = None
