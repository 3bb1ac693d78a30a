"""What can go wrong on the wire, put between an emulated instrument and its port.

Each fault has a kind, optionally a stretch of lab hours (``from_h``, ``hours``; 0 = for good) and a ``share``
of the replies it touches (default 1: every one). Kinds:

========== =====================================================================================
silent     no reply at all
late       the reply comes ``delay_s`` real seconds later
garbled    one character is another one
truncated  the reply stops somewhere in the middle, without its terminator
duplicate  the reply comes twice
babble     bytes without end and without terminator, asked or not (``bytes_per_s``)
hang_up    the connection is closed instead of answering (TCP)
identity   the instrument says it is ``text``
overload   every value is the instrument's sign of overload
missing    every value is the instrument's sign of "no reading"
error      the instrument refuses with its own error answer
========== =====================================================================================

The last four change what is said, not the bytes; the instrument asks :meth:`Faults.active` for them.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

KINDS: Final = (
    "silent", "late", "garbled", "truncated", "duplicate", "babble", "hang_up", "identity", "overload",
    "missing", "error",
)  # fmt: skip


@dataclass(frozen=True)
class Fault:
    """One fault; see the head of this module."""

    kind: str
    from_h: float = 0.0
    hours: float = 0.0
    share: float = 1.0
    delay_s: float = 1.0
    bytes_per_s: float = 2000.0
    text: str = "ANOTHER,INSTRUMENT,0,0"


@dataclass(frozen=True)
class Reply:
    """Bytes to be sent after ``delay_s`` real seconds; ``hang_up`` closes the connection instead."""

    data: bytes
    delay_s: float = 0.0
    hang_up: bool = False


class Faults:
    """The faults of one instrument, drawn from a seeded generator."""

    def __init__(self, faults: Sequence[Fault], seed: int) -> None:
        self.faults: list[Fault] = list(faults)
        self._rng = np.random.default_rng([seed, 5])

    def active(self, kind: str, lab_h: float) -> Fault | None:
        """Return a fault of ``kind`` that strikes now, or None."""
        for f in self.faults:
            inside = lab_h >= f.from_h and (f.hours == 0.0 or lab_h < f.from_h + f.hours)
            if f.kind == kind and inside and (f.share >= 1.0 or self._rng.random() < f.share):
                return f
        return None

    def on_the_wire(self, data: bytes, lab_h: float, delay_s: float) -> list[Reply]:
        """Return what really leaves the instrument instead of the reply ``data``."""
        if not data or self.active("silent", lab_h):
            return []
        if self.active("hang_up", lab_h):
            return [Reply(b"", 0.0, hang_up=True)]
        late = self.active("late", lab_h)
        if late is not None:
            delay_s += late.delay_s
        if self.active("garbled", lab_h):
            at = int(self._rng.integers(len(data)))
            other = (data[at] + int(self._rng.integers(1, 255))) % 256
            data = data[:at] + bytes([other]) + data[at + 1 :]
        if self.active("truncated", lab_h):
            data = data[: int(self._rng.integers(len(data)))]
        replies = [Reply(data, delay_s)] if data else []
        return replies * 2 if self.active("duplicate", lab_h) else replies

    def babble(self, lab_h: float, elapsed_s: float) -> bytes:
        """Return what a babbling instrument sends unasked in ``elapsed_s`` real seconds, mostly nothing."""
        fault = self.active("babble", lab_h)
        if fault is None:
            return b""
        count = min(int(fault.bytes_per_s * elapsed_s), 65536)
        return self._rng.integers(0x21, 0x7F, count, dtype=np.uint8).tobytes()


def faults_from_json(raw: object, place: str, seed: int) -> Faults:
    """Build the faults of one instrument from a list of plain JSON objects.

    Raises:
        ValueError: naming the place, what was got and what was wanted.
    """
    if not isinstance(raw, Sequence) or isinstance(raw, str | bytes):
        raise ValueError(f"{place}: got {raw!r}, wanted a list of faults")
    out: list[Fault] = []
    fields = {f.name: f.type for f in dataclasses.fields(Fault)}
    for i, item in enumerate(raw):
        if not isinstance(item, Mapping) or item.get("kind") not in KINDS:
            got = item.get("kind") if isinstance(item, Mapping) else item
            raise ValueError(f"{place}[{i}].kind: got {got!r}, wanted one of {list(KINDS)}")
        values: dict[str, Any] = {}
        for key, v in item.items():
            if key not in fields:
                raise ValueError(f"{place}[{i}].{key}: unknown; wanted one of {sorted(fields)}")
            if key in ("kind", "text"):
                values[key] = str(v)
            elif isinstance(v, bool) or not isinstance(v, int | float) or v < 0:
                raise ValueError(f"{place}[{i}].{key}: got {v!r}, wanted a number >= 0")
            else:
                values[key] = float(v)
        out.append(Fault(**values))
    return Faults(out, seed)
