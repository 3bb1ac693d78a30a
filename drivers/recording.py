r"""A recording played back as if its instrument were there: for training, demonstration and trial runs.

A test of last year, six times as fast, from its tenth hour on::

    driver: recording
    file: /data/recordings/h1-2024.csv
    speed: 6                  # default 1
    from_s: 36000             # where to begin, in seconds from the first line; default 0
    at_end: stop              # stop: nothing more is said; repeat: begin again
    yields: {left: left, right: right_um, oven: 4}    # column by name, or by number (time is column 1)

The file is plain CSV in UTF-8: the first column ``time_s`` (seconds) or ``time`` (ISO 8601 with zone),
every other column a channel, empty for no reading, lines beginning with ``#`` are comments. Each poll
gives the last line whose time has come since the poll before; without one the readings are missing, after
a damaged one they are garbled. Time runs from ``identify`` on.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import IO, Any, Final

from drivers.base import (
    GARBLED,
    GOOD,
    MISSING,
    Identity,
    IdentityError,
    InstrumentError,
    LinkError,
    RawReading,
    no_reading,
)
from drivers.lines import Garbled, parse_number
from drivers.options import OptionReader, must_be_fit
from drivers.transport import Clock, SystemClock

LINE_MOST: Final = 65536
LOOK_EVERY: Final = 256
"""Lines between two looks at the clock while catching up."""

Row = tuple[float, list[str]]


# ------------------------------------------------------------------------------ codec, no I/O


def rows(lines: Iterator[str]) -> Iterator[Row | Garbled]:
    """Yield the header as (NaN, columns), then (time [s], fields) of each line; damage is an event.

    Everything behind a damaged header is damaged too.
    """
    header: list[str] = []
    for n, line in enumerate(lines, start=1):
        if not line.strip() or line.startswith("#"):
            continue
        try:
            if len(line) > LINE_MOST:
                raise _DamagedError(f"got {len(line)} characters, need at most {LINE_MOST}")
            fields = [field.strip() for field in next(csv.reader([line], strict=True))]
            if not header and fields[0] not in ("time_s", "time"):
                raise _DamagedError(f"got the first column {fields[0][:40]!r}, need time_s or time")
            if header and len(fields) != len(header):
                raise _DamagedError(f"got {len(fields)} fields, need {len(header)}")
            time_s = _seconds(fields[0], header[0]) if header else math.nan
        except (_DamagedError, csv.Error) as error:
            yield Garbled(line[:80].encode(), f"line {n}: {error}")
            continue
        header = header or fields
        yield time_s, fields


class _DamagedError(Exception):
    pass


def _seconds(text: str, kind: str) -> float:
    if kind == "time_s":
        number = parse_number(text)
        if number is not None and number[1] == GOOD:
            return number[0]
        raise _DamagedError(f"got {text[:40]!r}, need seconds")
    try:
        when = datetime.fromisoformat(text)
    except ValueError as error:
        raise _DamagedError(f"got {text[:40]!r}, need an ISO 8601 time") from error
    if when.tzinfo is None:
        raise _DamagedError(f"got {text[:40]!r}, need a time with a zone")
    return when.timestamp()


# -------------------------------------------------------------------------------- the options


@dataclass(frozen=True, slots=True)
class _Options:
    file: str
    speed: float
    from_s: float
    repeat: bool
    columns: Mapping[str, str | int]


def _read_options(options: object) -> tuple[_Options, list[tuple[str, str]]]:
    top = OptionReader(options)
    columns: dict[str, str | int] = {}
    for name, own in top.parts("yields", number="number", text="column").items():
        if own.has("number") == own.has("column"):
            own.wrong("", "need a column's name, or its number")
        columns[name] = (
            own.whole("number", None, least=2, most=10_000) if own.has("number") else own.text("column", "?")
        )
        own.done()
    read = _Options(
        top.text("file"), top.number("speed", 1.0, least=1e-3, most=1e6),
        top.number("from_s", 0.0, most=1e12),
        top.choice("at_end", ("stop", "repeat"), "stop") == "repeat", columns,
    )  # fmt: skip
    return read, top.found()


# --------------------------------------------------------------------------------- the driver


class Recording:
    """A driver that plays a recording; options as at the head of this module."""

    listens = True

    def __init__(self, options: Mapping[str, Any], *, clock: Clock | None = None) -> None:
        self._options, problems = _read_options(options)
        must_be_fit(problems)
        self.yields: tuple[str, ...] = tuple(self._options.columns)
        self._clock: Clock = SystemClock() if clock is None else clock
        self._name = Path(self._options.file).name
        self._file: IO[str] | None = None
        self._rows: Iterator[Row | Garbled] = iter(())
        self._places: dict[str, int] = {}
        self._next: Row | Garbled | None = None
        self._origin_s = 0.0
        self._started_s = 0.0

    @classmethod
    def check_options(cls, options: Mapping[str, Any]) -> list[tuple[str, str]]:
        return _read_options(options)[1]

    def open(self) -> None:
        self.close()
        try:
            self._file = Path(self._options.file).open(encoding="utf-8", newline="")  # noqa: SIM115 - closed by close()
        except OSError as error:
            raise LinkError(f"{self._options.file}: cannot be opened: {error.strerror}") from error

    def close(self) -> None:
        file, self._file = self._file, None
        self._next, self._places = None, {}
        if file is not None:
            file.close()

    def identify(self) -> Identity:
        """Read the header and find the columns; the recording's clock starts here."""
        self._begin()
        return Identity(f"recording {self._name}: {', '.join(map(str, self._options.columns.values()))}")

    def _begin(self) -> None:
        if self._file is None:
            raise LinkError(f"{self._name}: got a call while closed, need open() first")
        self._file.seek(0)
        self._rows = rows(self._file)
        header, first = self._step(), self._step()
        damage = next((event for event in (header, first) if isinstance(event, Garbled)), None)
        if damage is not None or header is None or first is None:
            why = "got no line with readings, need at least one" if damage is None else damage.why
            raise InstrumentError(f"{self._name}: {why}")
        assert isinstance(header, tuple)
        assert isinstance(first, tuple)
        self._places = {
            name: self._column(wanted, header[1]) for name, wanted in self._options.columns.items()
        }
        self._next, self._origin_s = first, first[0] + self._options.from_s
        self._started_s = self._clock.now_s()
        while self._next is not None and (isinstance(self._next, Garbled) or self._next[0] < self._origin_s):
            self._next = self._step()

    def _column(self, wanted: str | int, header: list[str]) -> int:
        if isinstance(wanted, int) and wanted <= len(header):
            return wanted - 1
        if isinstance(wanted, str) and wanted in header[1:]:
            return header.index(wanted, 1)
        raise IdentityError(f"{self._name}: got the columns {', '.join(header)}, need {wanted!r}")

    def _step(self) -> Row | Garbled | None:
        try:
            return next(self._rows, None)
        except (OSError, UnicodeDecodeError, csv.Error) as error:
            raise InstrumentError(f"{self._name}: cannot be read on: {error}") from error

    def poll(self, deadline_s: float) -> list[RawReading]:
        if not self._places:
            raise IdentityError(f"{self._name}: got a poll, need identify() after open() first")
        now_s = self._clock.now_s()
        until_s = now_s + deadline_s
        if self._next is None and self._options.repeat:
            self._begin()
        due_s = self._origin_s + (now_s - self._started_s) * self._options.speed
        found: Row | Garbled | None = None
        steps = 0
        while self._next is not None and (isinstance(self._next, Garbled) or self._next[0] <= due_s):
            found, self._next = self._next, self._step()
            steps += 1
            if steps % LOOK_EVERY == 0 and self._clock.now_s() >= until_s:
                break
        return [self._reading(name, found) for name in self.yields]

    def _reading(self, name: str, row: Row | Garbled | None) -> RawReading:
        if isinstance(row, Garbled):
            return no_reading(name, GARBLED)
        text = "" if row is None else row[1][self._places[name]]
        if not text:
            return no_reading(name, MISSING)
        value, quality = parse_number(text) or (math.nan, GARBLED)
        return RawReading(name, value) if quality == GOOD else no_reading(name, quality)
