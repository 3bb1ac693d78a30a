"""CSV recordings: a block of scans at a time, every digit as it stands.

The format is frozen: plain CSV in UTF-8; first column ``time_s`` (seconds, any origin) or ``time`` (ISO 8601
with zone); every other column a channel by its configured name; an empty cell is no reading; lines
that begin with ``#`` are comments. Stamps may repeat or be slightly unordered.

Well-formed stretches go column by column through ``float`` (1.5 to 2 M cells a second and core); whatever is
not plain (quotes, odd cells, a wrong count) is taken again row by row, which costs more and
names the line and column of a mistake. Both ways give the same numbers: those that ``float`` gives.
The words ``nan`` and ``inf`` and the IEEE 488.2 numbers for them (9.91E37, +-9.9E37) are readings
without a number; they get a quality and never a value.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Callable, Iterator, Sequence
from itertools import repeat
from pathlib import Path
from typing import BinaryIO, Final

import numpy as np

from daq.instants import Instants
from daq.records import TICKS_PER_S, ByteArray, FloatArray, IntArray, Quality, ScansTaken, UpturnError

CHUNK: Final = 1 << 18
"""Bytes read at once."""
LONGEST_LINE: Final = 1 << 20
LARGEST_S: Final = 2.0**52 / TICKS_PER_S
"""A time beyond this could not be told to 0.1 ms from a double."""
NOT_A_NUMBER: Final = 9.91e37
INFINITY: Final = 9.9e37
NUMBER: Final = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?", re.ASCII)

Progress = Callable[[int], None]
"""Called with the number of bytes done."""


class RecordingError(UpturnError):
    """The recording cannot be read; the message is ``file:line: column NAME: got, wanted``."""


class Recording:
    """One recording, opened for the channels of one frame.

    Attributes:
        size: Bytes in the file, for a progress bar; ``done`` is how many have been read.
        notes: What the reader left aside, a sentence each.
        time_column: ``time_s`` or ``time``.
    """

    def __init__(self, path: Path | str, frame: str, columns: Sequence[str], block: int = 4096) -> None:
        """Read the header.

        Args:
            columns: Names of the channels wanted, in the order of the scans' columns.
            block: The most scans in a block.

        Raises:
            RecordingError: no such file, no header, no time column, a column twice, a channel missing.
        """
        self.path, self.frame, self.columns, self.block = Path(path), frame, tuple(columns), block
        self.notes: list[str] = []
        self.done = 0
        try:
            self.size = self.path.stat().st_size
            with self.path.open("rb") as file:
                lines = (
                    (first + i, line) for first, some, _ in self._lines(file) for i, line in enumerate(some)
                )
                self._header_line, header = next((pair for pair in lines if _is_data(pair[1])), (0, ""))
        except OSError as error:
            raise RecordingError(f"{path}: got {error.strerror}, wanted a CSV recording") from error
        if not self._header_line:
            raise RecordingError(f"{path}: got no line of text, wanted a header and scans")
        self._names = self._read_header(header)
        self.time_column = self._names[0]
        self._width = len(self._names)
        self._take = [self._names.index(c) for c in self.columns]
        self._instants = Instants() if self.time_column == "time" else None

    def blocks(self, progress: Progress | None = None) -> Iterator[ScansTaken]:
        """Yield the scans from the first to the last, at most ``block`` at a time.

        ``progress`` is called with the bytes done before each block.

        Raises:
            RecordingError: at the first line that cannot be understood.
        """
        numbers: list[int] = []
        texts: list[str] = []
        try:
            with self.path.open("rb") as file:
                for first, lines, plain in self._lines(file):
                    if plain and first > self._header_line:
                        texts += lines
                        numbers += range(first, first + len(lines))
                    else:
                        for number, line in enumerate(lines, first):
                            if number > self._header_line and _is_data(line):
                                texts.append(line)
                                numbers.append(number)
                    for start in range(0, len(texts) - self.block + 1, self.block):
                        stop = start + self.block
                        if progress is not None:
                            progress(self.done)
                        yield self._scans(texts[start:stop], numbers[start:stop])
                    left = len(texts) % self.block
                    texts, numbers = texts[len(texts) - left :], numbers[len(numbers) - left :]
        except OSError as error:
            raise RecordingError(f"{self.path}: got {error.strerror}, wanted a CSV recording") from error
        if texts:
            yield self._scans(texts, numbers)
        if progress is not None:
            progress(self.size)

    def how_at(self, tick: int) -> float | str:
        """Return an instant as the file writes it: seconds, or ISO 8601 in the file's zone and style.

        Zones are known as far as the file has been read.
        """
        return tick / TICKS_PER_S if self._instants is None else self._instants.text(tick)

    # --- lines and header -------------------------------------------------------------------

    def _lines(self, file: BinaryIO) -> Iterator[tuple[int, list[str], bool]]:
        """Yield (number of the first, some whole lines without their ends, whether all are data), in order.

        Bytes above 127 come as Latin-1: data is ASCII anyhow, and a comment may be anything.
        """
        rest = b""
        number = 1
        self.done = 0
        end = "\n"
        while chunk := file.read(CHUNK):
            if not self.done:
                chunk = self._checked_start(chunk)
                end = "\r" if b"\r" in chunk and b"\n" not in chunk else "\n"
            self.done = file.tell()
            chunk = rest + chunk
            cut = chunk.rfind(end.encode()) + 1
            rest = chunk[cut:]
            if len(rest) > LONGEST_LINE:
                line = number + chunk.count(end.encode())
                raise RecordingError(
                    f"{self.path}:{line}: got a line of more than {LONGEST_LINE} bytes, wanted plain CSV"
                )
            if cut:
                text = chunk[: cut - 1].decode("latin-1").replace("\r\n", "\n").removesuffix("\r")
                lines = text.split(end)
                odd = "#" in text or "" in lines or "\t" in text or f"{end} " in end + text
                yield number, lines, not odd
                number += len(lines)
        if rest:
            yield number, [rest.decode("latin-1").rstrip("\r")], False

    def _checked_start(self, chunk: bytes) -> bytes:
        if chunk.startswith(b"\xef\xbb\xbf"):
            return chunk[3:]
        kinds = {b"\x1f\x8b": "a gzip file", b"PK": "a zip file or workbook", b"SQLite": "a database"}
        kinds |= {b"\xff\xfe": "UTF-16 text", b"\xfe\xff": "UTF-16 text"}
        for magic, kind in kinds.items():
            if chunk.startswith(magic):
                raise RecordingError(f"{self.path}: got {kind}, wanted plain CSV in UTF-8")
        if b"\0" in chunk[:4096]:
            raise RecordingError(f"{self.path}: got binary data, wanted plain CSV in UTF-8")
        return chunk

    def _read_header(self, line: str) -> list[str]:
        place = f"{self.path}:{self._header_line}"
        try:
            text = line.encode("latin-1").decode("utf-8")
        except UnicodeDecodeError as error:
            raise RecordingError(
                f"{place}: got a header that is not UTF-8 ({error.reason}), wanted UTF-8"
            ) from None
        names = [name.strip() for name in _unquoted(text)]
        if names[0] not in ("time_s", "time"):
            hint = ""
            if ";" in text or "\t" in text:
                hint = "; columns must be separated by commas"
            elif "time_s" in names or "time" in names:
                hint = "; the time column must come first"
            raise RecordingError(
                f"{place}: column 1: got {names[0]!r},"
                f" wanted time_s (seconds) or time (ISO 8601 with zone){hint}"
            )
        twice = sorted({name for name in names if name and names.count(name) > 1})
        if twice:
            raise RecordingError(
                f"{place}: column {twice[0]}: got it {names.count(twice[0])} times, wanted once"
            )
        missing = [c for c in self.columns if c not in names[1:]]
        if missing:
            raise RecordingError(
                f"{place}: got the columns {', '.join(names)}, wanted also the configured"
                f" channel{'s' * (len(missing) > 1)} {', '.join(missing)}"
            )
        extra = [name for name in names[1:] if name not in self.columns]
        if extra:
            self.notes.append(f"{place}: columns without a channel are left aside: {', '.join(extra)}")
        return names

    # --- scans ------------------------------------------------------------------------------

    def _scans(self, texts: list[str], numbers: list[int]) -> ScansTaken:
        n = len(texts)
        values = np.empty((len(self._take), n))
        quality = np.zeros((len(self._take), n), np.uint8)
        ticks = self._fast(texts, values, quality)
        if ticks is None:
            ticks = self._slow(texts, numbers, values, quality)
        return ScansTaken(
            self.frame, self.columns, "", ticks, ticks, np.ascontiguousarray(values.T), quality.T.copy()
        )

    def _fast(self, texts: list[str], values: FloatArray, quality: ByteArray) -> IntArray | None:
        """Fill ``values`` column by column, or return None where something is not plain."""
        n = len(texts)
        whole = ",".join(texts)
        # float() takes underscores and digits of every script; a recording has neither
        if '"' in whole or "_" in whole or not whole.isascii():
            return None
        if any(count != self._width - 1 for count in map(str.count, texts, repeat(","))):
            return None
        cells = whole.split(",")
        try:
            if self._instants is not None:
                ticks = self._instants.ticks(cells[:: self._width])
            else:
                time_s = np.fromiter(map(float, cells[:: self._width]), np.float64, n)
                if not np.abs(time_s).max() < LARGEST_S:
                    return None
                ticks = np.rint(time_s * TICKS_PER_S).astype(np.int64)
            for row, j in enumerate(self._take):
                column = cells[j :: self._width]
                try:
                    values[row] = np.fromiter(map(float, column), np.float64, n)
                except ValueError:
                    values[row] = [float(c) if c else math.nan for c in column]
                odd = np.flatnonzero(~(np.abs(values[row]) < INFINITY))
                for i in odd.tolist():
                    values[row, i], quality[row, i] = reading(column[i])
        except ValueError:
            return None
        return ticks

    def _slow(self, texts: list[str], numbers: list[int], values: FloatArray, quality: ByteArray) -> IntArray:
        """Fill ``values`` row by row; the first mistake is an error with its place."""
        ticks = np.empty(len(texts), np.int64)
        for i, (text, number) in enumerate(zip(texts, numbers, strict=True)):
            cells = _unquoted(text) if '"' in text else text.split(",")
            if len(cells) != self._width:
                raise RecordingError(
                    f"{self.path}:{number}: got {len(cells)} cells, wanted {self._width}"
                    " as the header has (decimal points, not commas; the last line whole)"
                )
            ticks[i] = self._tick(cells[0], number)
            for row, j in enumerate(self._take):
                try:
                    values[row, i], quality[row, i] = reading(cells[j])
                except ValueError:
                    raise self._wrong(number, self._names[j], cells[j], "a number or nothing") from None
        return ticks

    def _tick(self, cell: str, number: int) -> int:
        if self._instants is not None:
            try:
                return int(self._instants.ticks([cell])[0])
            except ValueError:
                wanted = "an instant with zone, like 2031-05-04T12:00:00+01:00"
                raise self._wrong(number, "time", cell, wanted) from None
        if not NUMBER.fullmatch(cell.strip()):
            raise self._wrong(number, "time_s", cell, "a number of seconds")
        time_s = float(cell)
        if not abs(time_s) < LARGEST_S:
            raise self._wrong(number, "time_s", cell, f"seconds below {LARGEST_S:g}")
        return int(np.rint(time_s * TICKS_PER_S))

    def _wrong(self, number: int, column: str, cell: str, wanted: str) -> RecordingError:
        shown = cell.encode("latin-1", "replace").decode("utf-8", "replace")
        shown = shown if len(shown) <= 40 else shown[:37] + "..."
        return RecordingError(f"{self.path}:{number}: column {column}: got {shown!r}, wanted {wanted}")


def read(
    path: Path | str,
    frame: str,
    columns: Sequence[str],
    block: int = 4096,
    progress: Progress | None = None,
) -> Iterator[ScansTaken]:
    """Yield the scans of a recording in blocks; see :class:`Recording`."""
    return Recording(path, frame, columns, block).blocks(progress)


def _is_data(line: str) -> bool:
    return bool(line.strip()) and not line.startswith("#")


def _unquoted(line: str) -> list[str]:
    try:
        return next(csv.reader([line]))
    except csv.Error:
        return line.split(",")  # its cells are judged one by one


def reading(cell: str) -> tuple[float, Quality]:
    """Return what one cell says: a number, or NaN and why there is none.

    Raises:
        ValueError: the cell is neither a number, nor empty, nor one of the words for no number.
    """
    text = cell.strip()
    if not text:
        return math.nan, Quality.BAD_MISSING
    if NUMBER.fullmatch(text):
        value = float(text)
        if abs(value) == NOT_A_NUMBER:
            return math.nan, Quality.BAD_NOT_A_NUMBER
        if abs(value) == INFINITY or math.isinf(value):
            return math.nan, Quality.BAD_OVERLOAD
        return value, Quality.GOOD
    word = text.lower().lstrip("+-")
    if word == "nan":
        return math.nan, Quality.BAD_NOT_A_NUMBER
    if word in ("inf", "infinity"):
        return math.nan, Quality.BAD_OVERLOAD
    raise ValueError(cell)
