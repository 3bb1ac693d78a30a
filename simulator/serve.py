"""Serve emulated instruments on pseudo-terminals and on TCP, in lab time that may run fast.

``python -m simulator.serve SPEC.json`` prints one line of JSON, instrument -> port (a terminal's path, or
``socket://127.0.0.1:PORT``), and serves until its standard input closes or it gets SIGTERM. Exit code 0; 2
with a message on standard error if the specification is wrong. SPEC.json::

    {"origin_unix_s": 1.7e9,        # lab time begins here (default: now)
     "origin_boot_ns": 123456789,   # at this reading of the boot-time clock (default: now)
     "speed": 3600,                 # lab seconds per real second (default 1)
     "seed": 7,                     # default 0
     "rigs": {"H1": {"scenario": "tertiary_and_rupture"}, "H2": {...}},    # see scene
     "instruments": {
       "scanner-1": {"protocol": "scpi", "transport": "tcp",               # see instruments.scpi
                     "yields": {"101": "H1.top", "102": {"source": "H1.mid", "offset": 0.3}}},
       "gauge-1": {"protocol": "text", "transport": "pty",                 # see instruments.text
                   "yields": {"left": {"source": "H1.left", "scale": 25.0}},
                   "asks": {"D?": "{left:+09.4f} mm"}}}}

A lab moment is origin_unix_s + (boot time now - origin_boot_ns) * speed: whoever knows the three numbers
agrees on it without asking. One thread and one selector serve everything; tests use :class:`Server`.
"""

from __future__ import annotations

import contextlib
import heapq
import itertools
import json
import os
import pty
import selectors
import signal
import socket
import sys
import threading
import time
import tty
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import Any, Final

from simulator.instruments.device import Instrument, Session
from simulator.instruments.faults import Reply
from simulator.instruments.scpi import scpi_scanner
from simulator.instruments.text import text_instrument
from simulator.scene import Scene

CHUNK: Final = 4096
MOST_WAITING: Final = 1 << 18
"""Bytes kept for a peer that does not read; what comes on top is lost, as on a serial line."""
SEND_BUFFER: Final = 1 << 16
"""Bytes the system may hold for a connection: little, as in an instrument."""
TALK_EVERY_S: Final = 0.02
"""How often instruments that talk by themselves are asked for what they have to say."""


def boot_ns() -> int:
    """Return the boot-time clock [ns] (the monotonic clock where a system has no boot time)."""
    return time.clock_gettime_ns(getattr(time, "CLOCK_BOOTTIME", time.CLOCK_MONOTONIC))


@dataclass(eq=False)
class _Link:
    """One open way to an instrument: a terminal's master end, or an accepted connection."""

    fd: int
    session: Session
    close: Callable[[], None]
    waiting: bytearray = field(default_factory=bytearray)
    is_terminal: bool = False


class Server:
    """Emulated instruments behind real ports.

    ``ports`` maps each instrument to its port. Use as a context manager: a thread serves until the end of
    the block. ``lab_h()`` is the present lab time [h after the origin].

    Raises:
        ValueError: the specification is wrong; the message names place, got and wanted.
    """

    def __init__(self, spec: Mapping[str, Any]) -> None:
        known = {"origin_unix_s", "origin_boot_ns", "speed", "seed", "rigs", "instruments"}
        if unknown := set(spec) - known:
            raise ValueError(f"{sorted(unknown)[0]}: unknown; wanted one of {sorted(known)}")
        self.speed = _positive(spec.get("speed", 1.0), "speed")
        self.origin_unix_s = float(spec.get("origin_unix_s", time.time()))
        self.origin_boot_ns = int(spec.get("origin_boot_ns", boot_ns()))
        seed = int(spec.get("seed", 0))
        self.scene = Scene(_section(spec, "rigs"), seed)
        self.instruments: dict[str, Instrument] = {}
        self.ports: dict[str, str] = {}
        self._selector = selectors.DefaultSelector()
        self._links: list[_Link] = []
        self._talkers: list[tuple[Instrument, list[_Link]]] = []
        self._later: list[tuple[float, int, _Link, Reply]] = []
        self._count = itertools.count()
        self._closers: list[Callable[[], None]] = []
        self._wake_in, self._wake_out = socket.socketpair()
        self._wake_in.setblocking(False)
        self._thread: threading.Thread | None = None
        self._selector.register(self._wake_in, selectors.EVENT_READ, self._stop_serving)
        self._serving = True
        try:
            for number, (name, options) in enumerate(_section(spec, "instruments").items()):
                self._add(name, options, seed * 1000 + number)
        except BaseException:
            self.close()
            raise

    def lab_h(self) -> float:
        """Return hours of lab time since the origin."""
        return (boot_ns() - self.origin_boot_ns) / 3.6e12 * self.speed

    def serve(self) -> None:
        """Serve in this thread until :meth:`stop`."""
        before_s = time.monotonic()
        while self._serving:
            timeout_s = TALK_EVERY_S if self._talkers_due() else None
            if self._later:
                due = max(self._later[0][0] - time.monotonic(), 0.0)
                timeout_s = due if timeout_s is None else min(due, timeout_s)
            for key, events in self._selector.select(timeout_s):
                key.data(events)
            now_s = time.monotonic()
            while self._later and self._later[0][0] <= now_s:
                _, _, link, reply = heapq.heappop(self._later)
                self._deliver(link, reply)
            if now_s - before_s >= TALK_EVERY_S:
                self._let_talk(now_s - before_s)
                before_s = now_s

    def stop(self) -> None:
        """End :meth:`serve`; may be called from any thread or signal handler, more than once."""
        with contextlib.suppress(OSError):
            self._wake_out.send(b"x")

    def close(self) -> None:
        """Close all ports."""
        for link in list(self._links):
            self._drop(link)
        for close in self._closers:
            close()
        self._closers.clear()
        self._selector.close()
        self._wake_in.close()
        self._wake_out.close()

    def __enter__(self) -> Server:
        self._thread = threading.Thread(target=self.serve, name="emulated-instruments", daemon=True)
        self._thread.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.stop()
        if self._thread is not None:
            self._thread.join()
        self.close()

    # ------------------------------------------------------------------------------ building

    def _add(self, name: str, options: object, seed: int) -> None:
        place = f"instruments.{name}"
        if not isinstance(options, Mapping):
            raise ValueError(f"{place}: got {options!r}, wanted an object")
        makers: dict[object, Callable[..., Instrument]] = {"scpi": scpi_scanner, "text": text_instrument}
        protocol, transport = options.get("protocol"), options.get("transport", "pty")
        if protocol not in makers:
            raise ValueError(f"{place}.protocol: got {protocol!r}, wanted one of ['scpi', 'text']")
        if transport not in ("pty", "tcp"):
            raise ValueError(f"{place}.transport: got {transport!r}, wanted 'pty' or 'tcp'")
        instrument = makers[protocol](options, place, self.scene.read, self.scene.check, seed)
        links: list[_Link] = []
        self.instruments[name] = instrument
        self._talkers.append((instrument, links))
        self.ports[name] = (
            self._terminal(instrument, links) if transport == "pty" else self._listen(instrument, links)
        )

    def _terminal(self, instrument: Instrument, links: list[_Link]) -> str:
        master, slave = pty.openpty()
        tty.setraw(slave)
        os.set_blocking(master, False)
        # the slave end stays open here, or the master would report a hang-up between two clients
        self._closers.append(lambda: os.close(slave))
        link = _Link(master, Session(instrument), lambda: os.close(master), is_terminal=True)
        self._register(link, links)
        return os.ttyname(slave)

    def _listen(self, instrument: Instrument, links: list[_Link]) -> str:
        listener = socket.create_server(("127.0.0.1", 0))
        listener.setblocking(False)

        def accept(_: int) -> None:
            with contextlib.suppress(OSError):
                connection, _address = listener.accept()
                connection.setblocking(False)
                connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                connection.setsockopt(socket.SOL_SOCKET, socket.SO_SNDBUF, SEND_BUFFER)
                link = _Link(connection.fileno(), Session(instrument), connection.close)
                self._register(link, links)

        self._selector.register(listener, selectors.EVENT_READ, accept)
        self._closers.append(listener.close)
        return f"socket://127.0.0.1:{listener.getsockname()[1]}"

    def _register(self, link: _Link, links: list[_Link]) -> None:
        self._links.append(link)
        links.append(link)
        self._selector.register(link.fd, selectors.EVENT_READ, lambda events: self._ready(link, events))

    # ------------------------------------------------------------------------------- serving

    def _stop_serving(self, _: int) -> None:
        self._serving = False

    def _ready(self, link: _Link, events: int) -> None:
        if events & selectors.EVENT_WRITE:
            self._flush(link)
        if events & selectors.EVENT_READ and link in self._links:
            try:
                data = os.read(link.fd, CHUNK)
            except BlockingIOError:
                return
            except OSError:
                data = b""
            if not data:
                if not link.is_terminal:
                    self._drop(link)
                return
            now_s = time.monotonic()
            for reply in link.session.feed(data, self.lab_h()):
                heapq.heappush(self._later, (now_s + reply.delay_s, next(self._count), link, reply))

    def _deliver(self, link: _Link, reply: Reply) -> None:
        if link not in self._links:
            return
        if reply.hang_up and not link.is_terminal:
            self._drop(link)
            return
        self._send(link, reply.data)

    def _send(self, link: _Link, data: bytes) -> None:
        if len(link.waiting) + len(data) <= MOST_WAITING:
            link.waiting += data
        self._flush(link)

    def _flush(self, link: _Link) -> None:
        try:
            while link.waiting:
                sent = os.write(link.fd, link.waiting[:CHUNK])
                del link.waiting[:sent]
        except BlockingIOError:
            pass
        except OSError:
            link.waiting.clear()
            if not link.is_terminal:
                self._drop(link)
                return
        mask = selectors.EVENT_READ | (selectors.EVENT_WRITE if link.waiting else 0)
        if self._selector.get_key(link.fd).events != mask:
            self._selector.modify(link.fd, mask, lambda events: self._ready(link, events))

    def _drop(self, link: _Link) -> None:
        self._links.remove(link)
        for _, links in self._talkers:
            if link in links:
                links.remove(link)
        self._selector.unregister(link.fd)
        link.close()

    def _talkers_due(self) -> bool:
        return any(links for _, links in self._talkers)

    def _let_talk(self, elapsed_s: float) -> None:
        lab_h = self.lab_h()
        for instrument, links in self._talkers:
            said = instrument.talk(lab_h, elapsed_s)
            for link in list(links) if said else ():
                # a serial line nobody reads does not keep what was said on it
                if not (link.is_terminal and link.waiting):
                    self._send(link, said)


def _section(spec: Mapping[str, Any], key: str) -> Mapping[str, Any]:
    section = spec.get(key)
    if not isinstance(section, Mapping):
        raise ValueError(f"{key}: got {section!r}, wanted an object")
    return section


def _positive(v: object, place: str) -> float:
    if isinstance(v, bool) or not isinstance(v, int | float) or not v > 0:
        raise ValueError(f"{place}: got {v!r}, wanted a number > 0")
    return float(v)


def main(arguments: list[str]) -> int:
    """Run as a program; return the exit code."""
    if len(arguments) != 1:
        print("usage: python -m simulator.serve SPEC.json", file=sys.stderr)
        return 2
    try:
        server = Server(json.loads(Path(arguments[0]).read_text(encoding="utf-8")))
    except (OSError, ValueError) as wrong:
        print(f"{arguments[0]}: {wrong}", file=sys.stderr)
        return 2
    signal.signal(signal.SIGTERM, lambda *_: server.stop())
    signal.signal(signal.SIGINT, lambda *_: server.stop())
    print(json.dumps(server.ports), flush=True)

    def wait_for_the_end() -> None:
        while os.read(0, CHUNK):
            pass
        server.stop()

    threading.Thread(target=wait_for_the_end, daemon=True).start()
    server.serve()
    server.close()
    return 0


if __name__ == "__main__":
    # not sys.exit: the thread that reads standard input may hold its lock while the interpreter shuts down
    code = main(sys.argv[1:])
    sys.stdout.flush()
    os._exit(code)
