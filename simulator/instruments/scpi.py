"""An emulated scanner that speaks SCPI, with a channel list, an error queue and number sentinels.

Options, as plain JSON values beside ``protocol: scpi``:

- ``yields``: channel number -> source (see ``device.values_from_json``), e.g. ``{"101": "H1.top"}``.
- ``identity`` (default ``EXAMPLE,SCAN-40,SIM0001,1.0``), ``delay_s`` (0.002), ``faults`` (see ``faults``).
- ``terminator`` of replies (default LF).

Understood, in long or short form and any case, several joined by ``;``: ``*IDN?``, ``*CLS``, ``*RST``,
``*OPC``, ``*OPC?``, ``*ESR?``, ``*STB?``, ``*TST?``, ``*WAI``, ``SYSTem:ERRor[:NEXT]?``, ``SYSTem:VERSion?``,
``CONFigure:... [params,](@list)``, ``ROUTe:SCAN (@list)``, ``ROUTe:SCAN?``, ``INITiate``, ``FETCh?``,
``READ?``, ``MEASure:...? [params,](@list)``, and settings that are accepted without effect: ``SENSe:...``,
``FORMat:...``, ``UNIT:...``, ``TRIGger:...``, ``DISPlay:...``, ``INPut:...``.

Numbers go out as NR3. Over-range and open sensors are +9.9E37, no reading is 9.91E37 (IEEE 488.2, SCPI 1999).
Error numbers are those of SCPI 1999 (from memory): -113 undefined header, -109 missing parameter, -222 data
out of range, -221 settings conflict, -230 data stale, -350 queue overflow.
"""

from __future__ import annotations

import math
import re
from collections import deque
from collections.abc import Callable, Mapping
from typing import Any, Final

from simulator.instruments.device import Read, Value, values_from_json
from simulator.instruments.faults import Faults, faults_from_json

OVERLOAD: Final = "+9.90000000E+37"
NOT_A_NUMBER: Final = "+9.91000000E+37"
QUEUE_LENGTH: Final = 20
MOST_CHANNELS: Final = 400
_MESSAGES: Final[Mapping[int, str]] = {
    -109: "Missing parameter",
    -113: "Undefined header",
    -200: "Execution error",
    -221: "Settings conflict",
    -222: "Data out of range",
    -230: "Data corrupt or stale",
    -350: "Queue overflow",
}
_LIST = re.compile(r"\(@([0-9,:\s]*)\)\s*$")
_HEADS: Final[Mapping[str, re.Pattern[str]]] = {
    name: re.compile(pattern, re.IGNORECASE)
    for name, pattern in {
        "error": r":?SYST(EM)?:ERR(OR)?(:NEXT)?\?",
        "version": r":?SYST(EM)?:VERS(ION)?\?",
        "scan?": r":?ROUT(E)?:SCAN\?",
        "scan": r":?ROUT(E)?:SCAN",
        "read": r":?READ\?",
        "fetch": r":?FETC(H)?\?",
        "init": r":?INIT(IATE)?(:IMM(EDIATE)?)?",
        "measure": r":?MEAS(URE)?(:[A-Z0-9]+)*\?",
        "configure": r":?CONF(IGURE)?(:[A-Z0-9]+)*",
        "setting": r":?(SENS(E)?|FORM(AT)?|UNIT|TRIG(GER)?|DISP(LAY)?|INP(UT)?)(:[A-Z0-9]+)*",
    }.items()
}


class ScpiScanner:
    """A scanner whose channels are numbers; state: scan list, last scan, error queue."""

    def __init__(
        self, options: Mapping[str, Any], read: Read, values: Mapping[str, Value], faults: Faults
    ) -> None:
        self.faults = faults
        self.delay_s = float(options.get("delay_s", 0.002))
        self._read = read
        self._values = {int(number): value for number, value in values.items()}
        self._identity = str(options.get("identity", "EXAMPLE,SCAN-40,SIM0001,1.0"))
        self._terminator = str(options.get("terminator", "\n"))
        self._errors: deque[int] = deque()
        self._scan: list[int] = []
        self._last: list[str] = []
        self._event_status = 128  # power on

    def answer(self, line: str, lab_h: float) -> bytes:
        """Return the reply to one program message (several commands joined by ``;``); empty if none asks."""
        replies = [r for r in (self._command(c.strip(), lab_h) for c in line.split(";") if c.strip()) if r]
        return (";".join(replies) + self._terminator).encode("ascii") if replies else b""

    def talk(self, lab_h: float, elapsed_s: float) -> bytes:
        """Return what a babbling scanner sends unasked; a sound one says nothing."""
        return self.faults.babble(lab_h, elapsed_s)

    def _command(self, text: str, lab_h: float) -> str:
        if self.faults.active("error", lab_h) and not text.upper().startswith(("*IDN", "SYST", ":SYST")):
            return self._fail(-200)
        head, _, rest = text.partition(" ")
        if head.startswith("*"):
            return self._common(head.upper(), lab_h)
        name = next((n for n, pattern in _HEADS.items() if pattern.fullmatch(head)), None)
        if name == "error":
            code = self._errors.popleft() if self._errors else 0
            return f'{code:+d},"{_MESSAGES[code] if code else "No error"}"'
        if name == "version":
            return "1999.0"
        if name == "scan?":
            listed = ",".join(str(c) for c in self._scan)
            digits = str(len(listed) + 3)
            return f"#{len(digits)}{digits}(@{listed})"
        if name == "scan":
            return self._set_scan(rest)
        if name in ("read", "init"):
            if not self._scan:
                return self._fail(-221)
            self._last = self._measure(self._scan, lab_h)
            return ",".join(self._last) if name == "read" else ""
        if name == "fetch":
            return ",".join(self._last) if self._last else self._fail(-230)
        if name == "measure":
            channels = self._channels(rest)
            return ",".join(self._measure(channels, lab_h)) if channels else ""
        if name == "configure":
            # as on a real scanner, a configured list becomes the scan list
            return self._set_scan(rest)
        return "" if name == "setting" else self._fail(-113)

    def _common(self, head: str, lab_h: float) -> str:
        if head == "*IDN?":
            other = self.faults.active("identity", lab_h)
            return self._identity if other is None else other.text
        if head in ("*OPC?", "*TST?", "*STB?"):
            return "1" if head == "*OPC?" else "0"
        if head == "*ESR?":
            status, self._event_status = self._event_status, 0
            return str(status)
        if head in ("*CLS", "*RST"):
            self._errors.clear()
            if head == "*RST":
                self._scan, self._last = [], []
            return ""
        return "" if head in ("*OPC", "*WAI") else self._fail(-113)

    def _fail(self, code: int) -> str:
        if len(self._errors) >= QUEUE_LENGTH:
            self._errors[-1] = -350
        else:
            self._errors.append(code)
        return ""

    def _set_scan(self, text: str) -> str:
        channels = self._channels(text)
        if channels:
            self._scan = channels
        return ""

    def _channels(self, text: str) -> list[int]:
        """Parse ``...(@101,102,111:113)``; on an error queue it and return nothing."""
        found = _LIST.search(text)
        if found is None:
            self._fail(-109)
            return []
        channels: list[int] = []
        for piece in found[1].split(","):
            low, colon, high = (p.strip() for p in piece.partition(":"))
            if not low.isdigit() or (colon and not high.isdigit()):
                self._fail(-109)
                return []
            first, last = int(low), int(high or low)
            if not 0 <= last - first < MOST_CHANNELS:
                self._fail(-222)
                return []
            channels += range(first, last + 1)
        if any(c not in self._values for c in channels) or len(channels) > MOST_CHANNELS:
            self._fail(-222)
            return []
        return channels

    def _measure(self, channels: list[int], lab_h: float) -> list[str]:
        over = self.faults.active("overload", lab_h) is not None
        nothing = self.faults.active("missing", lab_h) is not None
        out: list[str] = []
        for channel in channels:
            x = self._values[channel].now(self._read, lab_h)
            if nothing or math.isnan(x):
                out.append(NOT_A_NUMBER)
            elif over or math.isinf(x):
                out.append(OVERLOAD)
            else:
                out.append(f"{x:+.8E}")
        return out


_KEYS: Final = frozenset({"protocol", "transport", "yields", "identity", "terminator", "delay_s", "faults"})


def scpi_scanner(
    options: Mapping[str, Any], place: str, read: Read, check: Callable[[str, str], None], seed: int
) -> ScpiScanner:
    """Build a scanner from its JSON options.

    Raises:
        ValueError: naming the place, what was got and what was wanted.
    """
    unknown = set(options) - _KEYS
    if unknown:
        raise ValueError(f"{place}.{sorted(unknown)[0]}: unknown; wanted one of {sorted(_KEYS)}")
    values = values_from_json(options.get("yields"), f"{place}.yields", check)
    for number in values:
        if not number.isdigit():
            raise ValueError(f"{place}.yields.{number}: got {number!r}, wanted a channel number")
    faults = faults_from_json(options.get("faults", ()), f"{place}.faults", seed)
    return ScpiScanner(options, read, values, faults)
