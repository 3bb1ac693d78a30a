r"""Numbers that the kernel shows as files: sysfs (hwmon, iio), 1-wire sensors, GPIO lines.

A room temperature from a 1-wire sensor and a chip on the board::

    driver: numberfile
    identity:                                 # or {declared: "..."}
      file: /sys/bus/w1/devices/28-0316a2795e01/name
      text: "28-0316a2795e01"                 # a regular expression
    yields:
      room:
        file: /sys/bus/w1/devices/28-0316a2795e01/w1_slave
        pattern: '.*crc=.. YES\n.* t=(?P<value>-?[0-9]+)\n'    # for the whole file; default: one number
        scale: 0.001
        no_reading: {85000: not_a_number}     # what this sensor says after a loss of power
      board: {file: /sys/class/hwmon/hwmon0/temp1_input, scale: 0.001}

Reading such a file can take most of a second (1-wire) or never end (a bus that hangs), and cannot be
called off. Each file is therefore read in a thread of its own; a poll waits for its answer until the
deadline and no longer. As long as one reading of a file has not come back no second one is begun, and what
comes back after the poll that asked for it is thrown away.
"""

from __future__ import annotations

import math
import os
import re
import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final

from drivers.base import (
    GARBLED,
    GOOD,
    MISSING,
    QUALITIES,
    Identity,
    IdentityError,
    LinkError,
    RawReading,
    no_reading,
)
from drivers.lines import parse_number
from drivers.options import OptionReader, must_be_fit

SIZE_MOST: Final = 4096
IDENTIFY_S: Final = 2.0
ONE_NUMBER: Final = r"\s*(?P<value>[^\s]+)\s*"

Value = tuple[float, str]
ReadFile = Callable[[str], bytes]


def read_file(path: str) -> bytes:
    """Return at most SIZE_MOST bytes of a file, opened anew each time as sysfs wants it."""
    fd = os.open(path, os.O_RDONLY | os.O_NONBLOCK)
    try:
        return os.read(fd, SIZE_MOST)
    finally:
        os.close(fd)


# -------------------------------------------------------------------------------- the options


@dataclass(frozen=True, slots=True)
class Source:
    """Where one reading comes from and how it is read."""

    name: str
    path: str
    pattern: re.Pattern[str]
    scale: float
    no_reading: Mapping[float, str]

    def read(self, data: bytes) -> Value:
        """Return (value, quality) of a file's content."""
        found = self.pattern.fullmatch(data.decode("latin-1"))
        number = parse_number(found["value"]) if found is not None and found["value"] is not None else None
        if number is None:
            return math.nan, GARBLED
        value, quality = number
        if quality == GOOD and value in self.no_reading:
            return math.nan, self.no_reading[value]
        return value * self.scale, quality


@dataclass(frozen=True, slots=True)
class _Options:
    sources: tuple[Source, ...]
    identity_file: str
    identity_text: re.Pattern[str] | None
    declared: str


def _read_options(options: object) -> tuple[_Options, list[tuple[str, str]]]:
    top = OptionReader(options)
    sources = tuple(_source(name, own) for name, own in top.parts("yields", text="file").items())
    identity_file, identity_text, declared = "", None, ""
    inside = top.part("identity")
    if inside is None:
        top.wrong("identity", 'is missing, need {file: ..., text: ...}, or {declared: "..."}')
    elif inside.has("declared"):
        declared = inside.text("declared")
        inside.done()
    else:
        identity_file = _path(inside)
        identity_text = inside.pattern("text")
        inside.done()
    return _Options(sources, identity_file, identity_text, declared), top.found()


def _source(name: str, own: OptionReader) -> Source:
    path = _path(own)
    source = own.text("pattern", ONE_NUMBER)
    pattern = own.pattern("pattern", ONE_NUMBER, lambda text: f"(?s:{text})")
    if "value" not in pattern.groupindex and pattern.pattern.startswith("(?s:"):
        own.wrong("pattern", f"got {source!r}, need a group (?P<value>...)")
    scale = own.number("scale", 1.0, least=-1e12, most=1e12)
    got = own.raw("no_reading") or {}
    words = QUALITIES - {GOOD}
    fits = isinstance(got, dict) and all(
        isinstance(k, int | float) and not isinstance(k, bool) and v in words for k, v in got.items()
    )
    if not fits:
        own.wrong("no_reading", f"got {got!r}, need numbers with one of {', '.join(sorted(words))}")
    own.done()
    return Source(name, path, pattern, scale, {float(k): v for k, v in got.items()} if fits else {})


def _path(options: OptionReader) -> str:
    path = options.text("file")
    if path and (not path.startswith("/") or "\0" in path):
        options.wrong("file", f"got {path!r}, need an absolute path")
    return path


# --------------------------------------------------------------------------------- the driver


class _Reader:
    """Reads one file in a thread of its own, which ends when nobody asks any more."""

    def __init__(self, path: str, read: ReadFile, done: threading.Condition) -> None:
        self.path = path
        self._read = read
        self._done = done
        self._busy_for = 0
        self.answer: tuple[int, bytes | OSError] | None = None

    def begin(self, poll: int) -> bool:
        """Start reading for this poll; False if an earlier reading has not come back."""
        with self._done:
            if self._busy_for:
                return False
            self._busy_for = poll
        threading.Thread(target=self._run, args=(poll,), name=f"read {self.path}", daemon=True).start()
        return True

    def _run(self, poll: int) -> None:
        try:
            found: bytes | OSError = self._read(self.path)
        except OSError as error:
            found = error
        with self._done:
            self.answer = (poll, found)
            self._busy_for = 0
            self._done.notify_all()


class NumberFile:
    """A driver for number files; options as at the head of this module."""

    listens = False

    def __init__(self, options: Mapping[str, Any], *, read: ReadFile = read_file) -> None:
        self._options, problems = _read_options(options)
        must_be_fit(problems)
        self.yields: tuple[str, ...] = tuple(source.name for source in self._options.sources)
        self._done = threading.Condition()
        paths = {source.path for source in self._options.sources} | {self._options.identity_file} - {""}
        self._readers = {path: _Reader(path, read, self._done) for path in sorted(paths)}
        self._polls = 0
        self._open = self._identified = False

    @classmethod
    def check_options(cls, options: Mapping[str, Any]) -> list[tuple[str, str]]:
        return _read_options(options)[1]

    def open(self) -> None:
        self._open, self._identified = True, False

    def close(self) -> None:
        self._open = self._identified = False

    def identify(self) -> Identity:
        o = self._options
        if not self._open:
            raise LinkError("number files: got a call while closed, need open() first")
        if o.identity_text is None:
            self._identified = True
            return Identity(o.declared, declared=True)
        found = self._read_all({o.identity_file}, IDENTIFY_S)[o.identity_file]
        if not isinstance(found, bytes):
            raise LinkError(f"{o.identity_file}: cannot be read: {_reason(found)}")
        text = found.decode("latin-1").strip("\n\0 ")
        if not o.identity_text.fullmatch(text):
            raise IdentityError(f"{o.identity_file}: got {text[:80]!r}, need {o.identity_text.pattern!r}")
        self._identified = True
        return Identity(text)

    def poll(self, deadline_s: float) -> list[RawReading]:
        if not self._identified:
            raise IdentityError("number files: got a poll, need identify() after open() first")
        found = self._read_all({source.path for source in self._options.sources}, deadline_s)
        if not any(isinstance(content, bytes) for content in found.values()):
            path, content = next(iter(found.items()))
            raise LinkError(f"{path}: cannot be read: {_reason(content)}")
        readings: list[RawReading] = []
        for source in self._options.sources:
            content = found[source.path]
            value, quality = source.read(content) if isinstance(content, bytes) else (math.nan, MISSING)
            readings.append(
                RawReading(source.name, value) if quality == GOOD else no_reading(source.name, quality)
            )
        return readings

    def _read_all(self, paths: set[str], deadline_s: float) -> dict[str, bytes | OSError | None]:
        """Read files at once; None for one that did not come back in time."""
        until_s = time.monotonic() + deadline_s
        self._polls += 1
        waiting = {path for path in sorted(paths) if self._readers[path].begin(self._polls)}
        found: dict[str, bytes | OSError | None] = dict.fromkeys(sorted(paths))
        with self._done:
            while waiting:
                for path in list(waiting):
                    answer = self._readers[path].answer
                    if answer is not None and answer[0] == self._polls:
                        found[path] = answer[1]
                        waiting.remove(path)
                left_s = until_s - time.monotonic()
                if left_s <= 0.0 or not waiting:
                    break
                self._done.wait(left_s)
        return found


def _reason(content: bytes | OSError | None) -> str:
    return "no answer in time" if content is None else getattr(content, "strerror", None) or str(content)
