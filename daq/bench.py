"""The emulated bench: a child process that plays the instruments, so that the rest is real.

The daemon talks to it as to any laboratory: through drivers, on pseudo-terminals and sockets. Time may
run faster than real time here, and only here, because every instrument is emulated; a lab file
that mixes emulated and real instruments is refused when it also asks for speed.
"""

from __future__ import annotations

import contextlib
import json
import os
import subprocess
import sys
import threading
from collections.abc import Callable
from dataclasses import replace
from typing import Any, Final

from daq.clock import BenchClock, Clock, Origin, RealClock
from daq.records import UpturnError
from daq.settings import Instrument, Lab

START_S: Final = 20.0


class BenchError(UpturnError):
    """The emulated instruments could not be started."""


class Bench:
    """The emulators of one lab file. ``instruments`` are the lab's with their real ports filled in."""

    def __init__(self, lab: Lab, line: Callable[[str], None] = print) -> None:
        self._lab = lab
        self._line = line
        self._process: subprocess.Popen[str] | None = None
        self.instruments: tuple[Instrument, ...] = lab.instruments
        self.clock: Clock = RealClock()

    def start(self) -> None:
        """Start the child and learn the ports.

        Raises:
            BenchError: it did not come up in time; the message carries what it said.
        """
        bench = self._lab.bench
        if bench is None or not any(i.emulated for i in self._lab.instruments):
            return
        origin = Origin.keep(self._lab.journal / "bench.json", bench.speed)
        if bench.speed != 1.0:
            self.clock = BenchClock(origin)
        spec = {
            **bench.spec,
            "origin_unix_s": origin.utc_ns / 1e9,
            "origin_boot_ns": origin.boot_ns,
            "speed": bench.speed,
        }
        path = self._lab.journal / "bench-spec.json"
        path.write_text(json.dumps(spec), encoding="utf-8")
        self._process = subprocess.Popen(
            [sys.executable, "-m", "simulator.serve", str(path)],
            stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
            # a Ctrl-C at the terminal is for the daemon, which then closes our stdin
            start_new_session=True,
        )  # fmt: skip
        ports = self._first_line(self._process)
        self.instruments = tuple(
            replace(i, port=ports[i.name], options={**i.options, "port": ports[i.name]}) if i.emulated else i
            for i in self._lab.instruments
        )

    def mark(self) -> None:
        """Note that the bench is alive; a later start learns from it how long it was switched off."""
        if self._process is not None:
            with contextlib.suppress(OSError):
                os.utime(self._lab.journal / "bench.json")

    def _first_line(self, process: subprocess.Popen[str]) -> dict[str, Any]:
        assert process.stdout is not None
        assert process.stderr is not None
        timer = threading.Timer(START_S, process.kill)
        timer.start()
        line = process.stdout.readline()
        timer.cancel()
        try:
            ports: dict[str, Any] = json.loads(line)
        except ValueError:
            process.kill()
            said = process.stderr.read()[-2000:]
            raise BenchError(
                f"emulated instruments: got {line!r}, wanted one line of ports; {said}"
            ) from None
        missing = [i.name for i in self._lab.instruments if i.emulated and i.name not in ports]
        if missing:
            raise BenchError(f"emulated instruments: no port for {', '.join(missing)}")
        # what it says later is for the log of whoever looks; it must never fill the pipe
        threading.Thread(target=self._drain, args=(process,), daemon=True, name="bench-stderr").start()
        return ports

    def _drain(self, process: subprocess.Popen[str]) -> None:
        with contextlib.suppress(OSError, ValueError):  # closed at the end
            for line in process.stderr or ():
                self._line(f"emulated instruments: {line.rstrip()}")

    def stop(self) -> None:
        """Close the child's stdin, on which it ends; end it by force after two seconds."""
        if self._process is None:
            return
        assert self._process.stdin is not None
        with contextlib.suppress(OSError):  # it has ended already
            self._process.stdin.close()
        try:
            self._process.wait(2.0)
        except subprocess.TimeoutExpired:
            self._process.kill()
            self._process.wait(2.0)
        for pipe in (self._process.stdout, self._process.stderr):
            if pipe is not None:
                pipe.close()
        self._process = None
