r"""Emulated instruments that send lines of text: dial gauges, indicators, controllers.

Options, as plain JSON values beside ``protocol: text``:

- ``yields``: name -> source (see ``device.values_from_json``); names are used in the patterns below.
- ``asks``: question -> reply pattern, e.g. ``{"D?": "{left:+09.4f} mm", "A": "{left:+.4f},{right:+.4f}"}``. A
  number stands as ``{name:format}`` in Python's format language. Default: ``NAME?`` to ``+0.000000``.
- ``identity`` (text) and ``identity_ask`` (default ``*IDN?``).
- ``talks``: ``{"every_s": 0.5, "line": "{left:+.4f} {right:+.4f}"}``: said unasked, real seconds.
- ``terminator`` (default CR LF), ``decimal_comma``, ``overload`` and ``missing`` (words instead of a number;
  default ``OVLD`` and ``OPEN``), ``unknown`` (answer to an unknown question; default none).
- ``checksum``: ``{"kind": "xor8" | "sum8", "mark": "*", "skip": 0}``: two hexadecimal digits behind the mark,
  over what stands before it less the first ``skip`` characters.
- ``delay_s``: real seconds before a reply (default 0.002). ``faults``: see ``faults``.

Protocol code of its own, on purpose: a mistake that it shared with a driver would look like agreement.
"""

from __future__ import annotations

import functools
import math
import re
from collections.abc import Callable, Mapping
from typing import Any, Final

from simulator.instruments.device import Read, Value, values_from_json
from simulator.instruments.faults import Faults, faults_from_json

_SLOT = re.compile(r"\{([A-Za-z_0-9]+)(?::([^{}]*))?\}")
_KEYS: Final = frozenset(
    {
        "protocol", "transport", "yields", "asks", "identity", "identity_ask", "talks", "terminator",
        "decimal_comma", "overload", "missing", "unknown", "checksum", "delay_s", "faults",
    }
)  # fmt: skip


def xor8(data: bytes) -> int:
    """Return the exclusive or of all bytes."""
    return functools.reduce(lambda a, b: a ^ b, data, 0)


def sum8(data: bytes) -> int:
    """Return the sum of all bytes modulo 256."""
    return sum(data) % 256


_CHECKSUMS: Final[Mapping[str, Callable[[bytes], int]]] = {"xor8": xor8, "sum8": sum8}


class TextInstrument:
    """An instrument that answers lines with lines, or talks by itself."""

    def __init__(
        self, options: Mapping[str, Any], read: Read, values: Mapping[str, Value], faults: Faults
    ) -> None:
        self.faults = faults
        self.delay_s = float(options.get("delay_s", 0.002))
        self._read = read
        self._values = values
        self._identity = str(options.get("identity", "SIMULATED GAUGE 1"))
        self._identity_ask = str(options.get("identity_ask", "*IDN?"))
        self._asks: dict[str, str] = dict(options.get("asks") or {f"{n}?": f"{{{n}:+.6f}}" for n in values})
        talks = options.get("talks") or {}
        self._line = str(talks.get("line", ""))
        self._every_s = float(talks.get("every_s", 1.0))
        self._since_s = 0.0
        self._terminator = str(options.get("terminator", "\r\n"))
        self._comma = bool(options.get("decimal_comma", False))
        self._overload = str(options.get("overload", "OVLD"))
        self._missing = str(options.get("missing", "OPEN"))
        self._unknown = str(options.get("unknown", ""))
        self._checksum: Mapping[str, Any] = options.get("checksum") or {}

    def answer(self, line: str, lab_h: float) -> bytes:
        """Return the reply line to the question ``line``, with terminator; empty for an unknown one."""
        if line == self._identity_ask:
            other = self.faults.active("identity", lab_h)
            return self._sealed(self._identity if other is None else other.text)
        pattern = self._asks.get(line)
        if pattern is None or self.faults.active("error", lab_h):
            return self._sealed(self._unknown) if self._unknown else b""
        return self._sealed(self._filled(pattern, lab_h))

    def talk(self, lab_h: float, elapsed_s: float) -> bytes:
        """Return the line that has come due in ``elapsed_s`` real seconds, if it talks by itself."""
        said = self.faults.babble(lab_h, elapsed_s)
        if not self._line:
            return said
        self._since_s += elapsed_s
        if self._since_s < self._every_s:
            return said
        self._since_s = math.fmod(self._since_s, self._every_s)
        replies = self.faults.on_the_wire(self._sealed(self._filled(self._line, lab_h)), lab_h, 0.0)
        return said + b"".join(r.data for r in replies)

    def _filled(self, pattern: str, lab_h: float) -> str:
        everything_over = self.faults.active("overload", lab_h) is not None
        nothing = self.faults.active("missing", lab_h) is not None

        def slot(match: re.Match[str]) -> str:
            x = self._values[match[1]].now(self._read, lab_h)
            if nothing or math.isnan(x):
                return self._missing
            if everything_over or math.isinf(x):
                return self._overload
            text = format(x, match[2] or "+.6f")
            return text.replace(".", ",") if self._comma else text

        return _SLOT.sub(slot, pattern)

    def _sealed(self, body: str) -> bytes:
        kind = self._checksum.get("kind")
        if kind:
            part = body[int(self._checksum.get("skip", 0)) :].encode("latin-1")
            body += f"{self._checksum.get('mark', '')}{_CHECKSUMS[kind](part):02X}"
        return (body + self._terminator).encode("latin-1")


def text_instrument(
    options: Mapping[str, Any], place: str, read: Read, check: Callable[[str, str], None], seed: int
) -> TextInstrument:
    """Build an instrument from its JSON options.

    Raises:
        ValueError: naming the place, what was got and what was wanted.
    """
    unknown = set(options) - _KEYS
    if unknown:
        raise ValueError(f"{place}.{sorted(unknown)[0]}: unknown; wanted one of {sorted(_KEYS)}")
    values = values_from_json(options.get("yields"), f"{place}.yields", check)
    asks = options.get("asks") or {}
    talks = options.get("talks") or {}
    if not isinstance(asks, Mapping) or not isinstance(talks, Mapping):
        raise ValueError(f"{place}: asks and talks must be objects")
    patterns = {f"{place}.asks.{q}": p for q, p in asks.items()}
    if talks:
        patterns[f"{place}.talks.line"] = talks.get("line")
    for where, pattern in patterns.items():
        if not isinstance(pattern, str):
            raise ValueError(f"{where}: got {pattern!r}, wanted a reply pattern")
        for match in _SLOT.finditer(pattern):
            if match[1] not in values:
                raise ValueError(f"{where}: got {match[0]!r}, wanted one of {sorted(values)}")
            try:
                format(0.0, match[2] or "")
            except ValueError as wrong:
                raise ValueError(f"{where}: got {match[0]!r}; {wrong}") from wrong
    kind = (options.get("checksum") or {}).get("kind")
    if kind is not None and kind not in _CHECKSUMS:
        raise ValueError(f"{place}.checksum.kind: got {kind!r}, wanted one of {sorted(_CHECKSUMS)}")
    faults = faults_from_json(options.get("faults", ()), f"{place}.faults", seed)
    return TextInstrument(options, read, values, faults)
