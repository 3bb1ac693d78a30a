"""Wires the live house together and keeps it until told to stop.

    buses -> assembler -> queue -> writer (engine, journal) -> publisher
                                     ^ spool folder              ^ acknowledgements come back

The main thread supervises: readiness, watchdog, clock steps, signals. It owns no data.
"""

from __future__ import annotations

import contextlib
import os
import subprocess
import sys
import threading
import time
from collections import defaultdict
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from daq.acquire import Assembler, Bus, Layout, Polled, Polling
from daq.bench import Bench
from daq.broker import EmbeddedBroker
from daq.clock import Clock
from daq.engine import HOST
from daq.entries import SPOOL
from daq.inlet import Acked, Inlet
from daq.lines import plain_line
from daq.publish import Publisher
from daq.records import TICKS_PER_S, ClockStepped, ConditionChanged, Finding, Stamp, UpturnError
from daq.reload import Reloader
from daq.settings import Instrument, Lab
from daq.startup import first_facts, recover, standing
from daq.store.journal import Journal
from daq.supervise import Rebuilding, Signals, Supervisor, notify
from daq.writer import Writer
from drivers import registry

__all__ = ["DaemonError", "House", "recover", "run"]

QUEUE_MOST: Final = 100_000
"""Scans that wait in memory while the disk is full: a day of one frame a second, some 30 MB."""
LOOK_EVERY_S: Final = 0.5
LATE_S: Final = 1.0
"""A scan waits for an instrument at least this long beyond its instant [real s], a period at least."""
BUSES_S, WRITER_S, PUBLISHER_S = 1.5, 2.0, 0.5
"""How long each is waited for at the end, in this order [s]; together less than five seconds."""
HUNG_MOST: Final = 3
"""How often a bus that hangs is begun anew; each time leaves a thread behind."""
CLOCK_STEP_S: Final = 1.0
"""A change of UTC against the boot clock from which it counts as set, not as slewed [real s]."""


class DaemonError(UpturnError):
    """The daemon cannot start as asked; the message says what to change."""


def run(lab: Lab, *, seconds: float | None = None, view: bool = False) -> int:
    """Run the daemon for ``lab`` until SIGTERM, SIGINT, ``seconds`` or a broken disk; return the exit code.

    Raises:
        JournalBusy: another daemon holds the journal.
        DaemonError, BenchError, SettingsError: it cannot start as asked.
    """
    with Journal.open(lab.journal, site=lab.site) as journal:
        _make_spool(lab.journal / SPOOL)
        log = _Log(lab.journal / "daemon.log" if view else None)
        for notice in journal.notices:
            log.line(f"journal: {notice}")
        bench = Bench(lab, log.line)
        broker = None
        try:
            bench.start()
            if lab.broker is not None and lab.broker.embedded:
                broker = EmbeddedBroker(lab.broker.port)
                broker.start()
            house = House(lab, journal, bench, log)
            code = house.live(seconds, view)
        finally:
            bench.stop()
            if broker is not None:
                broker.stop()
            log.close()
        if house.stuck:  # a write that hangs would hold up the journal's end for ever; a kill is as good
            print("upturn: the disk does not answer; ended without it", file=sys.stderr, flush=True)
            os._exit(74)
        return code


def _make_spool(spool: Path) -> None:
    try:
        spool.mkdir(mode=0o700, exist_ok=True)
    except OSError as error:
        raise DaemonError(f"{spool}: got {error.strerror}, wanted to make the folder for entries") from error


@dataclass
class Line:
    """One bus and its thread, and how to begin anew when it hangs."""

    bus: Bus
    hung: int = 0
    stalled: bool = False
    begun_at: float = 0.0


class House:
    """Everything that runs, from the first fact to the last, so that it can be stopped in order."""

    def __init__(self, lab: Lab, journal: Journal, bench: Bench, log: _Log) -> None:
        self._lab = lab
        self._log = log
        self._bench = bench
        self._clock = clock = bench.clock
        self._inlet = inlet = Inlet(QUEUE_MOST)
        self._stop, self._drain = threading.Event(), threading.Event()
        self._bus_threads: list[threading.Thread] = []
        self.stuck = False
        engine, ended = recover(journal, log.line, Rebuilding(journal.last_seq).reached)

        def trouble(condition: str, active: bool, message: str) -> None:
            inlet.news(ConditionChanged(clock.stamp(), HOST, "broker", condition, active, message))

        def acked(rows: Sequence[int]) -> None:
            inlet.news(Acked(rows))

        self._publisher = None
        if lab.broker is not None:
            self._publisher = Publisher(lab.broker, site=lab.site, on_acked=acked, on_trouble=trouble)
        told = {"site": lab.site, "speed": clock.speed, "emulated": lab.bench is not None, "pid": os.getpid()}
        self._writer = Writer(
            journal, engine, inlet, clock, site=lab.site, host_status=told, publisher=self._publisher,
            say=log.finding, line=log.line,
        )  # fmt: skip
        self._writer_thread = threading.Thread(
            target=self._writer.run, args=(self._drain,), name="writer", daemon=True
        )
        self._lines = self._make_lines(bench.instruments, lambda name: standing(engine, name))
        self._writer.take_now(first_facts(lab, engine, clock, ended))
        self._backlog = self._writer.backlog
        self._reloader = Reloader(lab, clock, inlet.news, log.line)

    # --- buses ---------------------------------------------------------------------------

    def _make_lines(self, instruments: Sequence[Instrument], lost: Callable[[str], bool]) -> dict[str, Line]:
        """One bus for each port; instruments that share a port take turns on it."""
        by_port: dict[str, list[Polling]] = defaultdict(list)
        for i in instruments:
            period = max(1, round(i.poll_s * TICKS_PER_S))
            by_port[i.port or i.name].append(Polling(i.name, _maker(i), period, lost=lost(i.name)))
        buses = {
            port: Bus(port, polled, self._clock, self._deliver, self._news)
            for port, polled in by_port.items()
        }
        self._assembler = Assembler(_layouts(self._lab, list(buses.values()), self._clock), self._inlet.scan)
        return {port: Line(bus) for port, bus in buses.items()}

    def _deliver(self, polled: Polled) -> None:
        self._assembler.deliver(polled)

    def _news(self, instrument: str, condition: str, active: bool, message: str) -> None:
        frames = sorted(
            {f.name for f in self._lab.frames if any(i == instrument for i, _ in f.sources.values())}
        )
        text = f"{instrument} ({', '.join(frames)}): {message}"
        self._inlet.news(ConditionChanged(self._clock.stamp(), HOST, instrument, condition, active, text))

    def _start_bus(self, bus: Bus) -> None:
        thread = threading.Thread(target=bus.run, args=(self._stop,), name=f"bus {bus.name}", daemon=True)
        self._bus_threads.append(thread)
        thread.start()

    def _begin_anew(self, line: Line) -> None:
        """Leave a hung thread to itself and poll the same port from a fresh one."""
        line.hung += 1
        line.begun_at = time.monotonic()
        old = line.bus
        old.abandon()
        self._log.line(f"bus {old.name}: begun anew ({line.hung} of {HUNG_MOST} times)")
        fresh = [Polling(p.name, p.make, p.period_ticks, lost=p.lost) for p in old.polled]
        line.bus = Bus(old.name, fresh, self._clock, self._deliver, self._news, seed=line.hung)
        self._start_bus(line.bus)

    # --- life ----------------------------------------------------------------------------

    def live(self, seconds: float | None, view: bool) -> int:
        """Start everything, look after it until it is time to stop, stop it; return the exit code."""
        child = None
        with Signals() as signals:
            try:
                if self._publisher is not None:
                    self._publisher.start(self._backlog)
                self._writer_thread.start()
                for line in self._lines.values():
                    self._start_bus(line.bus)
                notify(f"READY=1\nSTATUS={self._watching}")
                child = _start_view(self._lab) if view else None
                self._supervise(signals, seconds, child)
            finally:
                notify("STOPPING=1")
                self._end(child)
        return 74 if self._writer.broken is not None else 0

    def _end(self, child: Any) -> None:
        """Buses first, then the writer with what they left, then the publisher with what that made."""
        self._stop.set()
        if child is not None:
            child.terminate()
        end = time.monotonic() + BUSES_S
        for thread in self._bus_threads:  # one that hangs is left behind; it ends with the process
            thread.join(max(0.0, end - time.monotonic()))
        self._drain.set()
        if self._writer_thread.ident is not None:
            self._writer_thread.join(WRITER_S)
            self.stuck = self._writer_thread.is_alive()
        if self._publisher is not None:
            self._publisher.stop(PUBLISHER_S)
        if child is not None:
            try:
                child.wait(1.0)
            except subprocess.TimeoutExpired:  # stopped from the keyboard, say
                child.kill()
                child.wait()

    @property
    def _watching(self) -> str:
        return f"watching {len(self._lab.frames)} frames"

    def _reload(self) -> None:
        notify(f"RELOADING=1\nMONOTONIC_USEC={time.monotonic_ns() // 1000}")
        good = self._reloader.again()
        refused = "" if good else "; the lab file was refused, the old settings stay in force"
        notify(f"READY=1\nSTATUS={self._watching}{refused}")

    def _supervise(self, signals: Signals, seconds: float | None, child: Any) -> None:
        """Look after everything about twice a second until it is time to stop."""
        supervisor = Supervisor()
        supervisor.watch("writer", lambda: self._writer.beat, 30.0)
        if self._publisher is not None:
            publisher = self._publisher
            supervisor.watch("publisher", lambda: publisher.beat, 30.0)
        lines = {f"bus {port}": line for port, line in self._lines.items()}
        for name, line in lines.items():
            longest_s = line.bus.longest_turn_s
            supervisor.watch(name, lambda line=line: line.bus.beat, longest_s, vital=False)  # type: ignore[misc]
        clock = self._clock
        began = time.monotonic()
        lead = _lead(clock.stamp())
        period = min((f.scan_every_s for f in self._lab.frames), default=1.0)
        while self._writer.broken is None:
            if signals.wait(min(LOOK_EVERY_S, max(0.05, period / clock.speed / 2))):
                return
            if signals.take_reload():
                self._reload()
            self._bench.mark()
            now = clock.stamp()
            step = _lead(now) - lead
            lead += step  # a clock that is slewed moves by little from look to look, one that is set by much
            if abs(step) / TICKS_PER_S / clock.speed > CLOCK_STEP_S:
                self._inlet.news(ClockStepped(now, step))
            self._assembler.overdue(now.boot_tick, now)
            for name, stalled in supervisor.look():
                self._log.line(f"{name}: {'no progress for too long' if stalled else 'moves again'}")
                if name in lines:
                    message = f"{name} hangs" if stalled else f"{name} moves again"
                    self._inlet.news(ConditionChanged(now, HOST, name, "link_lost", stalled, message))
                    lines[name].stalled = stalled
            for line in lines.values():
                waited_s = time.monotonic() - line.begun_at
                if line.stalled and line.hung < HUNG_MOST and waited_s > line.bus.longest_turn_s:
                    self._begin_anew(line)
            if child is not None and child.poll() is not None:
                child = None
                self._log.to_terminal(
                    f"The view is closed; recording goes on. Ctrl-C stops it; "
                    f"`upturn watch {self._lab.journal}` opens the view again."
                )
            if seconds is not None and time.monotonic() - began >= seconds:
                return


def _lead(stamp: Stamp) -> int:
    return stamp.utc_tick - stamp.boot_tick


def _layouts(lab: Lab, buses: Sequence[Bus], clock: Clock) -> list[Layout]:
    slowest = {p.name: bus.polls_s for bus in buses for p in bus.polled}
    layouts = []
    for f in lab.frames:
        sources = tuple(f.sources[c] for c in f.columns)
        turn_s = max((slowest.get(instrument, 0.0) for instrument, _ in sources), default=0.0)
        late_s = max(f.scan_every_s, max(LATE_S, turn_s) * clock.speed)
        period = max(1, round(f.scan_every_s * TICKS_PER_S))
        layouts.append(Layout(f.name, f.columns, sources, period, round(late_s * TICKS_PER_S)))
    return layouts


def _maker(i: Instrument) -> Callable[[], Any]:
    return lambda: registry.create(i.driver, i.options)


def _start_view(lab: Lab) -> Any:
    return subprocess.Popen([sys.executable, "-m", "daq.cli", "watch", str(lab.journal)])


class _Log:
    """Plain lines: to stdout, or to a file in the journal folder while the view has the terminal.

    Lines come from several threads. No trouble with them may stop the recording: a full log disk, a
    closed pipe, a terminal that cannot show a letter.
    """

    def __init__(self, path: Path | None) -> None:
        self._lock = threading.Lock()
        self._file = None
        if path is not None:
            try:
                self._file = path.open("a", encoding="utf-8")
            except OSError as error:
                raise DaemonError(f"{path}: got {error.strerror}, wanted to write the log there") from error

    def line(self, text: str) -> None:
        self._write(f"{time.strftime('%Y-%m-%dT%H:%M:%SZ', time.gmtime())} upturn: {text}")

    def finding(self, f: Finding) -> None:
        self._write(plain_line(f))

    def to_terminal(self, text: str) -> None:
        """The view has gone: from here on lines go to the terminal again."""
        self.close()
        self.line(text)

    def _write(self, text: str) -> None:
        with self._lock, contextlib.suppress(OSError, ValueError):
            print(text, file=self._file or sys.stdout, flush=True)

    def close(self) -> None:
        with self._lock, contextlib.suppress(OSError):
            if self._file is not None:
                file, self._file = self._file, None
                file.close()
