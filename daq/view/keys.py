"""The keyboard: bytes of a terminal in cbreak mode, turned into names of keys, without ever blocking."""

from __future__ import annotations

import codecs
import contextlib
import os
import re
import select
import sys
import termios
import tty
from typing import IO, Any, Final

UP: Final = "up"
DOWN: Final = "down"
PAGE_UP: Final = "page_up"
PAGE_DOWN: Final = "page_down"
HOME: Final = "home"
END: Final = "end"
ENTER: Final = "enter"
ESCAPE: Final = "escape"
BACKSPACE: Final = "backspace"
TAB: Final = "tab"
OTHER: Final = "other"

ESCAPE_S: Final = 0.1
"""How long the rest of a key's sequence may take, over a slow line, before its escape counts as a key."""

_SEQUENCES: Final = {
    "A": UP, "B": DOWN, "H": HOME, "F": END, "1~": HOME, "7~": HOME, "4~": END, "8~": END, "5~": PAGE_UP,
    "6~": PAGE_DOWN, "Z": TAB,
}  # fmt: skip
_ESCAPE: Final = re.compile(r"\x1b(?:\[|O)([0-9;?]*[@-~])")
_HALF: Final = re.compile(r"\x1b(?:(?:\[|O)[0-9;?]{0,16})?")
_PLAIN: Final = {"\r": ENTER, "\n": ENTER, "\x7f": BACKSPACE, "\b": BACKSPACE, "\t": TAB}


class KeyCodec:
    """Cut what a terminal sends into keys: one-character names for what prints, words for the rest."""

    def __init__(self) -> None:
        self._bytes = codecs.getincrementaldecoder("utf-8")("replace")
        self._pending = ""

    @property
    def waiting(self) -> bool:
        """Whether an escape has come that may be a key by itself or the beginning of a sequence."""
        return bool(self._pending)

    def feed(self, data: bytes) -> list[str]:
        """Take any slice of the stream; return the keys that it completes."""
        text = self._pending + self._bytes.decode(data)
        self._pending = ""
        keys = []
        at = 0
        while at < len(text):
            char = text[at]
            if char != "\x1b":
                keys.append(_PLAIN.get(char) or (char if char.isprintable() else OTHER))
                at += 1
            elif m := _ESCAPE.match(text, at):
                keys.append(_SEQUENCES.get(m[1], OTHER))
                at = m.end()
            elif _HALF.fullmatch(text, at):
                self._pending = text[at:]
                break
            else:
                keys.append(ESCAPE)
                at += 1
        return keys

    def settle(self) -> list[str]:
        """Say that nothing followed for a while: a lone escape was the Escape key."""
        keys = [ESCAPE] if self._pending else []
        self._pending = ""
        return keys


class Closed(Exception):  # noqa: N818  (no error: the terminal went away, and the view ends)
    """The terminal was closed."""


class Keyboard:
    """The terminal's input in cbreak mode: keys come one by one and unechoed; Ctrl-C still interrupts.

    Without a terminal on standard input there are no keys, and waiting is all it does.
    """

    def __init__(self, stream: IO[Any] | None = None) -> None:
        self._codec = KeyCodec()
        self._fd: int | None = None
        self._before: list[Any] | None = None
        with contextlib.suppress(OSError, ValueError, AttributeError):
            fd = (stream or sys.stdin).fileno()
            if os.isatty(fd):
                self._fd = fd

    def __enter__(self) -> Keyboard:
        if self._fd is not None:
            with contextlib.suppress(termios.error):
                self._before = termios.tcgetattr(self._fd)
                tty.setcbreak(self._fd, termios.TCSANOW)
        return self

    def __exit__(self, *_: object) -> None:
        if self._fd is not None and self._before is not None:
            with contextlib.suppress(termios.error, OSError):
                termios.tcsetattr(self._fd, termios.TCSANOW, self._before)
            self._before = None

    def wait(self, seconds: float, *, also: int | None = None) -> list[str]:
        """Return the keys pressed within ``seconds``, as soon as there are any.

        ``also`` is a descriptor that ends the waiting too.

        Raises:
            Closed: the terminal went away.
        """
        if self._codec.waiting:
            seconds = min(seconds, ESCAPE_S)
        watched = [fd for fd in (self._fd, also) if fd is not None]
        ready, _, _ = select.select(watched, [], [], max(seconds, 0.0))
        if also is not None and also in ready:
            with contextlib.suppress(OSError):
                os.read(also, 512)
        if self._fd is None or self._fd not in ready:
            return self._codec.settle() if not ready else []
        try:
            data = os.read(self._fd, 1024)
        except BlockingIOError:
            return []
        except OSError as error:
            raise Closed from error
        if not data:
            raise Closed
        return self._codec.feed(data)
