"""The loop of the view: read, draw, take keys. One thread, no transaction held while it waits.

It is a process of its own because a terminal that nobody reads blocks whoever writes to it (a stopped
terminal, a dead line): then only the view stands still. A closed terminal ends it without a word.
"""

from __future__ import annotations

import contextlib
import errno
import math
import os
import signal
import sys
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from datetime import UTC
from types import FrameType
from typing import Any, Final

from rich.console import Console, ConsoleDimensions
from rich.live import Live
from rich.text import Text

from daq.records import UpturnError
from daq.view.commands import Order, Page, ViewState, index_of, press
from daq.view.keys import Closed, Keyboard
from daq.view.model import Place, Snapshot, Source, places
from daq.view.screen import compose
from daq.view.words import ASCII, UNICODE, Glyphs, Words

READ_EVERY_S: Final = 1.0
LEAST_REDRAW_S: Final = 0.25
"""Four screens a second at most, whatever keys are held down."""
NOTICE_S: Final = 8.0
IDLE_SHARE: Final = 4.0
"""A read that took t seconds is followed by this many t of rest: fifty viewers must not wear a host down."""

Enter = Callable[..., object]
"""Called as ``enter(frame=, entry=, initials=, values=, note=)`` for each entry that a person makes."""


def watch(
    source: Source,
    *,
    enter: Enter | None = None,
    console: Console | None = None,
    seconds: float | None = None,
    plain: bool | None = None,
) -> int:
    """Show what ``source`` says until the person quits, the terminal closes, or ``seconds`` are over.

    Where standard output is no terminal that can be drawn on, one list is printed as plain lines.

    Args:
        enter: Writes an entry; None where this view cannot. An UpturnError or OSError of it is shown.
        console: Where to draw; by default standard output.
        plain: Whether to keep to ASCII; None finds out from the terminal's encoding.

    Returns:
        0, or 1 where there was nothing to print and no terminal to wait on.
    """
    console = console or _Terminal()
    glyphs = _glyphs(console) if plain is None else ASCII if plain else UNICODE
    view = _View(source, enter, glyphs)
    try:
        if not console.is_terminal or console.is_dumb_terminal:
            return view.print_once(console)
        with _Signals() as signals, Keyboard() as keyboard:
            _run(view, console, keyboard, signals, seconds)
    except Closed:
        _forget_output(console)
    except OSError as error:
        if error.errno not in _GONE:
            raise
        _forget_output(console)
    except KeyboardInterrupt:
        pass
    return 0


_GONE: Final = frozenset({errno.EIO, errno.EPIPE, errno.EBADF, errno.ENXIO})
"""What a terminal, or the reader of a pipe, that went away answers."""


class _Terminal(Console):
    """Standard output, which says when it is gone instead of ending the process by itself."""

    def on_broken_pipe(self) -> None:
        raise BrokenPipeError(errno.EPIPE, "nobody reads the output")


def _glyphs(console: Console) -> Glyphs:
    """Return signs that the terminal can show: the kernel's own console has no braille in its font."""
    unicode = console.encoding.lower().replace("_", "-") in ("utf-8", "utf8", "utf-16", "utf-32")
    return UNICODE if unicode and os.environ.get("TERM") != "linux" else ASCII


def _forget_output(console: Console) -> None:
    """Let what is still buffered for a terminal that is gone go nowhere, so that the end is quiet."""
    with contextlib.suppress(OSError, ValueError, AttributeError):
        console.file.flush()
    for stream in (sys.stdout, sys.stderr):
        with contextlib.suppress(OSError, ValueError, AttributeError):
            null = os.open(os.devnull, os.O_WRONLY)
            os.dup2(null, stream.fileno())
            os.close(null)


# --- signals ------------------------------------------------------------------------------


class _Signals:
    """Signals become flags and a wake-up: nothing is drawn, read or closed inside a handler."""

    def __init__(self) -> None:
        self.end = False
        self.hung_up = False
        self.wake_fd: int | None = None
        self._seen: set[str] = set()
        self._before: dict[int, Any] = {}
        self._write_fd: int | None = None
        self._wakeup_before = -1

    def __enter__(self) -> _Signals:
        self.wake_fd, self._write_fd = os.pipe()
        for fd in (self.wake_fd, self._write_fd):
            os.set_blocking(fd, False)
        with contextlib.suppress(ValueError):  # not the main thread: signals are somebody else's
            self._wakeup_before = signal.set_wakeup_fd(self._write_fd, warn_on_full_buffer=False)
            for number in (signal.SIGHUP, signal.SIGTERM, signal.SIGWINCH, signal.SIGTSTP):
                self._before[number] = signal.signal(number, self._handle)
        return self

    def __exit__(self, *_: object) -> None:
        for number, before in self._before.items():
            signal.signal(number, before)
        if self._before:
            signal.set_wakeup_fd(self._wakeup_before)
        for fd in (self.wake_fd, self._write_fd):
            if fd is not None:
                os.close(fd)

    def _handle(self, number: int, _: FrameType | None) -> None:
        self.hung_up |= number == signal.SIGHUP
        self.end |= number in (signal.SIGHUP, signal.SIGTERM)
        self._seen |= {"stopped"} if number == signal.SIGTSTP else set()
        self._seen |= {"resized"} if number == signal.SIGWINCH else set()

    def take(self, what: str) -> bool:
        """Return whether ``what`` ("stopped" or "resized") has come since the last call."""
        seen = what in self._seen
        self._seen.discard(what)
        return seen


# --- the view -----------------------------------------------------------------------------


@dataclass(slots=True)
class _View:
    """What the loop carries from one turn to the next."""

    source: Source
    enter: Enter | None
    glyphs: Glyphs
    state: ViewState = field(default_factory=ViewState)
    shot: Snapshot | None = None
    rows: tuple[Place, ...] = ()
    error: str = ""

    def read(self) -> None:
        """Ask the source; where it cannot say, keep what was last read and say so."""
        detail = None
        if self.state.page is Page.DETAIL and self.rows:
            detail = self.rows[index_of(self.state, self.rows)].name
        try:
            self.shot = self.source.read(detail)
            self.rows = tuple(places(self.shot))
            self.error = ""
        except (UpturnError, OSError) as error:
            self.error = str(error)

    def lines(self, size: tuple[int, int]) -> list[Text]:
        words = Words(self.glyphs, UTC if self.state.utc else None)
        return compose(self.state, self.shot, self.rows, size, words, self.error)

    def press(self, key: str) -> None:
        self.state = press(self.state, key, self.rows)
        if self.state.order is not None:
            self.state = replace(self.state, order=None, notice=self._carry_out(self.state.order))

    def _carry_out(self, order: Order) -> str:
        if self.enter is None:
            return "this view cannot make entries; use the command `upturn tell` on the daemon's host"
        done = 0
        try:
            for values in order.values:
                self.enter(
                    frame=order.frame, entry=order.entry, initials=order.initials, values=values, note=""
                )
                done += 1
        except (UpturnError, OSError) as error:
            return f"entry {done + 1} of {len(order.values)} was not written: {error}"
        return (
            f"handed to the daemon: {order.entry} by {order.initials}; the list shows it once it is recorded"
        )

    def print_once(self, console: Console) -> int:
        """Print the list as plain lines, however long, for a pipe or a terminal that cannot be drawn on."""
        self.read()
        if self.shot is None:
            sys.stderr.write(f"{self.error}\n")
            return 1
        long = sum(12 + len(p.alarms) for p in self.rows) + 20
        lines = self.lines((max(console.width, 40), long))
        text = "\n".join(line.plain.rstrip() for line in lines)
        console.file.write(_without_gaps(text) + "\n")
        console.file.flush()
        return 0


def _without_gaps(text: str) -> str:
    """Return the text without runs of empty lines, which filled a screen that a file does not have."""
    told: list[str] = []
    for line in text.split("\n"):
        if line or (told and told[-1]):
            told.append(line)
    return "\n".join(told)


def _run(view: _View, console: Console, keyboard: Keyboard, signals: _Signals, seconds: float | None) -> None:
    started = time.monotonic()
    ends = math.inf if seconds is None else started + seconds
    next_read, drawn_at, noticed_at = started, -math.inf, started
    dirty = True
    with _Drawing(console) as drawing:
        while not (view.state.quit or signals.end):
            now = time.monotonic()
            if now >= ends:
                break
            if now >= next_read:
                view.read()
                cost, now = time.monotonic() - now, time.monotonic()
                next_read = now + max(READ_EVERY_S, IDLE_SHARE * cost)
                dirty = True
            if view.state.notice and now - noticed_at > NOTICE_S:
                view.state = replace(view.state, notice="")
                dirty = True
            if dirty and now - drawn_at >= LEAST_REDRAW_S:
                drawing.draw(view)
                drawn_at, dirty = now, False
            until = min(next_read, ends, drawn_at + LEAST_REDRAW_S if dirty else math.inf)
            for key in keyboard.wait(until - time.monotonic(), also=signals.wake_fd):
                view.press(key)
                dirty, noticed_at = True, time.monotonic()
                if view.state.page is Page.DETAIL:
                    next_read = noticed_at  # the marks and events of another test may be wanted
            if signals.take("stopped"):
                with drawing.away(keyboard):
                    os.kill(os.getpid(), signal.SIGSTOP)
                dirty = True
            dirty |= signals.take("resized")
    if signals.hung_up:
        raise Closed


class _Drawing:
    """The terminal's other screen, which the view draws on and leaves as it found the first."""

    def __init__(self, console: Console) -> None:
        self._console = console
        self._live: Live | None = None
        self._shows: object = None

    def __enter__(self) -> _Drawing:
        self._start()
        return self

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        if kind is None or not issubclass(kind, (Closed, OSError)):
            self._end()
            return
        with contextlib.suppress(OSError):  # the terminal may be gone, or may still be there to be put right
            self._end()

    def _start(self) -> None:
        self._live = Live(
            console=self._console,
            screen=True,
            auto_refresh=False,
            redirect_stdout=False,
            redirect_stderr=False,
        )
        self._live.start()

    def _end(self) -> None:
        if self._live is not None:
            live, self._live, self._shows = self._live, None, None
            live.stop()

    @contextlib.contextmanager
    def away(self, keyboard: Keyboard) -> Iterator[None]:
        """Give the terminal back for as long as the process is stopped."""
        self._end()
        keyboard.__exit__()
        yield
        keyboard.__enter__()
        self._start()

    def draw(self, view: _View) -> None:
        """Draw, unless the screen already shows the same."""
        size = _size(self._console)
        screen = Text("\n", no_wrap=True, overflow="crop", end="").join(view.lines(size))
        shows = (size, screen.plain, tuple(screen.spans))
        if shows != self._shows and self._live is not None:
            self._console.size = ConsoleDimensions(*size)
            self._live.update(screen, refresh=True)
            self._shows = shows


def _size(console: Console) -> tuple[int, int]:
    """Return the terminal's size of now: a fixed one in the environment would not survive a resize."""
    try:
        width, height = os.get_terminal_size(console.file.fileno())
    except (OSError, ValueError, AttributeError):
        width, height = console.size
    return (width or 80, height or 24)
