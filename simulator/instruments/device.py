"""What every emulated instrument is: bytes in, timed replies out, without a port or a clock.

The wire side lives in ``serve``: it owns ports and real time, and hands each connection's bytes to
a :class:`Session`. Sessions of one instrument share the instrument (its error queue, its set-up).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final, Protocol

from simulator.instruments.faults import Faults, Reply

LONGEST_LINE: Final = 4096
Read = Callable[[str, float], float]
"""(source, lab hours) -> value; NaN no reading, infinity open or over-range."""


@dataclass(frozen=True)
class Value:
    """Where one number of an instrument comes from: ``source`` scaled into the instrument's unit."""

    source: str
    scale: float = 1.0
    offset: float = 0.0

    def now(self, read: Read, lab_h: float) -> float:
        """Return the number in the instrument's unit; NaN and infinity pass through."""
        x = read(self.source, lab_h)
        return x * self.scale + self.offset if math.isfinite(x) else x


class Instrument(Protocol):
    """An emulated instrument that understands lines."""

    faults: Faults
    delay_s: float

    def answer(self, line: str, lab_h: float) -> bytes:
        """Return the reply to one line without its terminator; empty where there is none."""
        ...

    def talk(self, lab_h: float, elapsed_s: float) -> bytes:
        """Return what the instrument says unasked during ``elapsed_s`` real seconds."""
        ...


class Session:
    """One connection to an instrument: cuts the byte stream into lines at CR or LF, bounded."""

    def __init__(self, instrument: Instrument) -> None:
        self._instrument = instrument
        self._pending = b""

    def feed(self, data: bytes, lab_h: float) -> list[Reply]:
        """Take any slice of what the peer sends; return the replies that it completes."""
        self._pending += data.replace(b"\n", b"\r")
        *lines, rest = self._pending.split(b"\r")
        self._pending = rest[-LONGEST_LINE:]
        replies: list[Reply] = []
        for raw in lines:
            line = raw.decode("ascii", "replace").strip()
            if line:
                said = self._instrument.answer(line, lab_h)
                replies += self._instrument.faults.on_the_wire(said, lab_h, self._instrument.delay_s)
        return replies


def values_from_json(raw: object, place: str, check: Callable[[str, str], None]) -> dict[str, Value]:
    """Build ``{name: Value}`` from ``{name: "RIG.CHANNEL"}`` or ``{name: {source, scale, offset}}``.

    ``check(source, place)`` raises ValueError for a source that does not exist.
    """
    if not isinstance(raw, Mapping) or not raw:
        raise ValueError(f"{place}: got {raw!r}, wanted an object of names and sources")
    out: dict[str, Value] = {}
    for key, item in raw.items():
        where = f"{place}.{key}"
        fields: Mapping[str, Any] = item if isinstance(item, Mapping) else {"source": item}
        unknown = set(fields) - {"source", "scale", "offset"}
        if unknown:
            raise ValueError(f"{where}.{sorted(unknown)[0]}: unknown; wanted source, scale, offset")
        source = fields.get("source")
        if not isinstance(source, str):
            raise ValueError(f"{where}: got {source!r}, wanted RIG.CHANNEL")
        check(source, where)
        numbers: dict[str, float] = {}
        for name in ("scale", "offset"):
            v = fields.get(name, 1.0 if name == "scale" else 0.0)
            if isinstance(v, bool) or not isinstance(v, int | float):
                raise ValueError(f"{where}.{name}: got {v!r}, wanted a number")
            numbers[name] = float(v)
        out[str(key)] = Value(source, numbers["scale"], numbers["offset"])
    return out
