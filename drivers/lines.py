"""Lines of text as instruments send them: cutting, checksums, numbers. No port, no clock.

Numbers follow IEEE 488.2 (NR1, NR2, NR3) and the SCPI sentinels: plus or minus 9.9E37 stands for
over-range, 9.91E37 for not-a-number. Neither ever becomes a reading's value.
"""

from __future__ import annotations

import binascii
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

from drivers.base import GOOD, NOT_A_NUMBER, OPEN_CIRCUIT, OVERLOAD

MAX_LINE: Final = 1024
NUMBER_MOST: Final = 40
"""Characters in a number at most; the longest double needs 24."""
NAN: Final = float("nan")


@dataclass(frozen=True, slots=True)
class Line:
    """One complete line, without its terminator."""

    text: str


@dataclass(frozen=True, slots=True)
class Garbled:
    """Bytes that are no line, and why; the next line survives."""

    raw: bytes
    why: str


class LineCodec:
    """Cut a byte stream into lines. Takes any slicing, keeps at most one line, never raises.

    The events do not depend on where the stream was cut. Blank lines are no events. With
    ``synced=False`` everything up to the first terminator is dropped unseen: whoever begins to listen in
    the middle of ``12.345`` would otherwise hear ``2.345``.
    """

    blank = b"\r\n \t"

    def __init__(self, terminator: bytes = b"\r\n", most: int = MAX_LINE, encoding: str = "ascii") -> None:
        self._end = terminator
        self._most = most
        self._encoding = encoding
        self._pending = b""
        self._skipping = False

    def reset(self, synced: bool = True) -> None:
        """Forget the open line; ``synced`` False drops what comes up to the next terminator."""
        self._pending = b""
        self._skipping = not synced

    @property
    def midway(self) -> bool:
        """Whether part of a line waits for the rest."""
        return bool(self._pending.strip(self.blank)) or self._skipping

    def feed(self, data: bytes) -> list[Line | Garbled]:
        """Take any slice of the stream; return the lines it completes, maybe none."""
        events: list[Line | Garbled] = []
        *done, rest = (self._pending + data).split(self._end)
        for raw in done:
            if self._skipping:
                self._skipping = False  # the line it belonged to was reported when it grew too long
            else:
                events += self._judge(raw)
        # the last bytes may be the beginning of a terminator and do not count as content yet
        tail = len(self._end) - 1
        if not self._skipping and len(rest) - tail > self._most:
            events.append(self._too_long(rest))
            self._skipping = True
        self._pending = rest[len(rest) - tail :] if self._skipping else rest
        return events

    def _judge(self, raw: bytes) -> list[Line | Garbled]:
        if len(raw) > self._most:
            return [self._too_long(raw)]
        raw = raw.strip(b"\r\n")
        if not raw.strip():
            return []
        try:
            text = raw.decode(self._encoding)
        except UnicodeDecodeError as error:
            return [Garbled(raw, f"byte 0x{raw[error.start]:02x} at place {error.start + 1}")]
        for place, sign in enumerate(text, start=1):
            if not (sign.isprintable() or sign == "\t"):
                return [Garbled(raw, f"byte 0x{ord(sign):02x} at place {place}")]
        return [Line(text)]

    def _too_long(self, raw: bytes) -> Garbled:
        return Garbled(raw[: self._most], f"no terminator within {self._most} bytes")


# --------------------------------------------------------------------------------- checksums


def crc16_modbus(data: bytes) -> int:
    """CRC-16 of Modbus over Serial Line: polynomial 0xA001 reflected, start 0xFFFF."""
    crc = 0xFFFF
    for byte in data:
        crc ^= byte
        for _ in range(8):
            crc = (crc >> 1) ^ 0xA001 if crc & 1 else crc >> 1
    return crc


def _xor8(data: bytes) -> int:
    value = 0
    for byte in data:
        value ^= byte
    return value


CHECKSUMS: Final[Mapping[str, tuple[int, Callable[[bytes], int]]]] = {
    "sum8": (2, lambda data: sum(data) & 0xFF),
    "lrc8": (2, lambda data: -sum(data) & 0xFF),
    "xor8": (2, _xor8),
    "crc16_modbus": (4, crc16_modbus),
    "crc16_ccitt": (4, lambda data: binascii.crc_hqx(data, 0xFFFF)),
    "crc16_xmodem": (4, lambda data: binascii.crc_hqx(data, 0)),
}
"""Name -> (hexadecimal digits, function of the bytes). lrc8 is the two's complement of the sum."""


@dataclass(frozen=True, slots=True)
class Checksum:
    """A checksum in hexadecimal digits at the end of a line, maybe behind a mark such as ``*``.

    ``skip`` characters at the beginning of the line (a start sign) are not part of the sum.
    """

    kind: str
    mark: str = ""
    skip: int = 0

    def seal(self, body: str) -> str:
        """Return the line with its checksum."""
        digits, function = CHECKSUMS[self.kind]
        return f"{body}{self.mark}{function(body[self.skip :].encode('latin-1')):0{digits}X}"

    def unseal(self, line: str) -> str | None:
        """Return the line without its checksum, or None if that is wrong or missing."""
        digits, _ = CHECKSUMS[self.kind]
        body = line[: -digits - len(self.mark)]
        return body if len(body) > self.skip and self.seal(body).upper() == line.upper() else None


# ----------------------------------------------------------------------------------- numbers

WORDS: Final[Mapping[str, str]] = {
    "OL": OVERLOAD, "+OL": OVERLOAD, "-OL": OVERLOAD, "OVL": OVERLOAD, "OVLD": OVERLOAD, "OVER": OVERLOAD,
    "OVERLOAD": OVERLOAD, "OVERFLOW": OVERLOAD, "OVERRANGE": OVERLOAD, "INF": OVERLOAD, "+INF": OVERLOAD,
    "-INF": OVERLOAD, "NINF": OVERLOAD, "NAN": NOT_A_NUMBER, "OPEN": OPEN_CIRCUIT, "BURNOUT": OPEN_CIRCUIT,
}  # fmt: skip
"""What instruments write instead of a number, and what it means (common practice, no source)."""
_POINT = re.compile(r"([+-]?)[ ]*([0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE]([+-]?[0-9]{1,3}))?")
_OVER_RANGE: Final = 9.9e37
_NO_NUMBER: Final = 9.91e37
_NEAR: Final = 1e-6


def parse_number(
    text: str, *, decimal_comma: bool = False, words: Mapping[str, str] = WORDS
) -> tuple[float, str] | None:
    """Return (value, quality) of a number as an instrument writes it; None if it is no number.

    Integer, decimal and exponent forms with an optional sign (blanks between sign and digits are
    common); no digit grouping, no hexadecimal. Words and sentinels give NaN and their quality.
    """
    bare = text.strip()
    if bare.upper() in words:
        return NAN, words[bare.upper()]
    if decimal_comma:
        if "." in bare:
            return None
        bare = bare.replace(",", ".", 1)
    found = _POINT.fullmatch(bare) if len(bare) <= NUMBER_MOST else None
    if found is None:
        return None
    value = float(f"{found[1]}{found[2]}e{found[3] or 0}")
    size = abs(value)
    if abs(size - _NO_NUMBER) <= _NEAR * _NO_NUMBER:
        return NAN, NOT_A_NUMBER
    if size >= _OVER_RANGE * (1.0 - _NEAR):
        return NAN, OVERLOAD
    return value, GOOD
