"""How the view says things: signs with an ASCII twin, numbers, times, and pieces of a line.

Everything that came from outside passes :meth:`Words.clean`: a message from an instrument
must not move the cursor of the terminal that shows it.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, tzinfo
from typing import Final, NamedTuple

from rich.cells import cell_len, set_cell_size
from rich.text import Text

from daq.records import TICKS_PER_S
from daq.view.model import Band

STYLES: Final = {
    "": "",
    "name": "bold",
    "figure": "",
    "unit": "dim",
    "rule": "dim",
    "press": "bold red",
    "seen": "yellow",
    "late": "bold yellow",
    "soon": "cyan",
    "curve": "",
    "label": "reverse bold",
    "chosen": "bold",
    "quiet": "dim",
}
"""Every style of the view. Colour only repeats what a word or a sign beside it says."""


@dataclass(frozen=True, slots=True)
class Glyphs:
    """The signs of the view, each one cell wide."""

    plain: bool
    rises: str = "↗"
    falls: str = "↘"
    level: str = "→"
    times: str = "×"
    about: str = "±"
    rule: str = "─"
    dot: str = "·"
    pointer: str = "●"
    bar: str = "│"
    start: str = "├"
    end: str = "┤"
    notch: str = "┤"
    chosen: str = "▌"
    tick: str = "╵"
    now: str = "▏"
    cut: str = "…"
    more: str = "▾"
    less: str = "▴"


UNICODE: Final = Glyphs(plain=False)
ASCII: Final = Glyphs(
    plain=True, rises="/", falls="\\", level="-", times="x", about="~", rule="-", dot=".",
    pointer="o", bar="|", start="[", end="]", notch="+", chosen=">", tick="'", now="|", cut="~", more="v",
    less="^",
)  # fmt: skip

_TO_ASCII: Final = str.maketrans("±×·–—−°µμσεäöüéß…’“”→≤≥", '~x.--- uuseaoues~\'""><>')
DAYS: Final = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
MONTHS: Final = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
NONE: Final = "-"


class Words:
    """Turns values into words in one zone of time and one set of signs."""

    def __init__(self, glyphs: Glyphs = UNICODE, zone: tzinfo | None = UTC) -> None:
        """``zone`` None is the local zone of this machine."""
        self.glyphs = glyphs
        self.zone = zone

    def clean(self, text: str) -> str:
        """Return outside text without control characters, and in ASCII where the terminal has no more."""
        text = "".join(c if c.isprintable() else " " if c in "\t\n" else "?" for c in text)
        if self.glyphs.plain:
            text = text.translate(_TO_ASCII).encode("ascii", "replace").decode("ascii")
        return text

    # numbers

    def strain(self, strain: float | None) -> str:
        """Return strain in percent, four figures at most: "1.830 %"."""
        if strain is None or not math.isfinite(strain):
            return NONE
        percent = 100.0 * strain
        return f"{percent:.{3 if abs(percent) < 9.9995 else 2 if abs(percent) < 99.995 else 1}f} %"

    def rate(self, per_h: float | None) -> str:
        """Return a rate in percent per hour, three figures: "0.0210", "2.10e-5"; without unit."""
        if per_h is None or not math.isfinite(per_h):
            return NONE
        return figures(100.0 * per_h)

    def half_width(self, low: float | None, high: float | None, value: float | None) -> str:
        """Return the interval as the larger half width in percent of the value: "±5%"."""
        if low is None or high is None or not value or not all(map(math.isfinite, (low, high, value))):
            return ""
        share = 100.0 * max(high - value, value - low) / abs(value)
        return f">{self.glyphs.about}99%" if share >= 99.5 else f"{self.glyphs.about}{max(share, 1.0):.0f}%"

    def degrees(self, celsius: float | None) -> str:
        """Return a temperature: "980.3 °C"."""
        if celsius is None or not math.isfinite(celsius):
            return NONE
        return f"{celsius:.1f} C" if self.glyphs.plain else f"{celsius:.1f} °C"

    def off(self, b: Band | None) -> str:
        """Return the distance from the set point: "+0.3 K"."""
        return NONE if b is None else f"{round(b.off_k, 1) + 0.0:+.1f} K"

    def strip(self, b: Band | None, width: int) -> str:
        """Return the band as a strip with a pointer, for instance [--|o-]; beyond it the pointer is < or >.

        The bar stands at the set point, the ends are the limits; ``width`` >= 5.
        """
        g = self.glyphs
        if b is None or b.below_k is None or b.above_k is None or b.below_k + b.above_k <= 0:
            return " " * width
        n = width - 2
        cells = [g.dot] * n
        span = b.below_k + b.above_k

        def at(off: float) -> int:
            return min(max(int((off + b.below_k) / span * n), 0), n - 1)  # type: ignore[operator]

        cells[at(0.0)] = g.bar
        if b.beyond == 0:
            cells[at(b.off_k)] = g.pointer
        left, right = ("<" if b.beyond < 0 else "["), (">" if b.beyond > 0 else "]")
        return left + "".join(cells) + right

    def in_band(self, b: Band | None) -> str:
        """Return in words where the temperature lies: "in band", "0.4 K above the band"."""
        if b is None or (b.below_k is None and b.above_k is None):
            return ""
        if b.beyond > 0 and b.above_k is not None:
            return f"{b.off_k - b.above_k:.1f} K ABOVE THE BAND"
        if b.beyond < 0 and b.below_k is not None:
            return f"{-b.below_k - b.off_k:.1f} K BELOW THE BAND"
        return "in band"

    # times

    def hours(self, h: float | None) -> str:
        """Return test hours: "0.25 h", "12.4 h", "4210 h"."""
        if h is None or not math.isfinite(h):
            return NONE
        return f"{h:.{2 if abs(h) < 1 else 1 if abs(h) < 99.95 else 0}f} h"

    def moment(self, tick: int) -> datetime | None:
        """Return the instant in the zone of this view, None where no calendar holds it."""
        try:
            return datetime.fromtimestamp(tick / TICKS_PER_S, UTC).astimezone(self.zone)
        except (OverflowError, OSError, ValueError):
            return None

    def zone_name(self, tick: int) -> str:
        """Return the zone's short name at that instant."""
        m = self.moment(tick)
        return (m.tzname() or "local") if m else ""

    def clock(self, tick: int) -> str:
        """Return date, time and zone in full: "Tue 14 May 2024 03:12:40 UTC"."""
        m = self.moment(tick)
        if m is None:
            return NONE
        day = f"{DAYS[m.weekday()]} {m.day} {MONTHS[m.month - 1]} {m.year}"
        return f"{day} {m:%H:%M:%S} {self.zone_name(tick)}"

    def short_clock(self, tick: int) -> str:
        """Return date, time and zone in short: "Tue 14 May 03:12 UTC"."""
        m = self.moment(tick)
        if m is None:
            return NONE
        return f"{DAYS[m.weekday()]} {m.day} {MONTHS[m.month - 1]} {m:%H:%M} {self.zone_name(tick)}"

    def when(self, tick: int, now_tick: int) -> str:
        """Return an instant as near as it needs: "07:30", "Wed 07:30", "14 May 07:30", "14 May 2027"."""
        m, now = self.moment(tick), self.moment(now_tick)
        if m is None or now is None:
            return NONE
        if m.date() == now.date():
            return f"{m:%H:%M}"
        days = (m.date() - now.date()).days
        if abs(days) <= 6:
            return f"{DAYS[m.weekday()]} {m:%H:%M}"
        if abs(days) <= 180:
            return f"{m.day} {MONTHS[m.month - 1]} {m:%H:%M}"
        return f"{m.day} {MONTHS[m.month - 1]} {m.year}"


def figures(x: float) -> str:
    """Return three figures: fixed from 0.001 to 999, else with an exponent."""
    if x == 0.0:
        return "0"
    power = math.floor(math.log10(abs(float(f"{x:.2e}"))))
    if -3 <= power <= 2:
        return f"{x:.{2 - power}f}"
    mantissa, exponent = f"{x:.2e}".split("e")
    return f"{mantissa}e{int(exponent)}"


def span(seconds: float) -> str:
    """Return a length of time in words: "45 s", "12 min", "4 h 18 min", "3 d 4 h", "95 d"."""
    s = int(max(seconds, 0.0) + 0.5)
    if s < 100:
        return f"{s} s"
    minutes = int(seconds / 60 + 0.5)
    if minutes < 100:
        return f"{minutes} min"
    if minutes < 48 * 60:
        return f"{minutes // 60} h {minutes % 60:02d} min"
    hours = int(seconds / 3600 + 0.5)
    return f"{hours // 24} d {hours % 24} h" if hours < 28 * 24 else f"{hours // 24} d"


def short_span(seconds: float) -> str:
    """Return a length of time in at most five characters: "45s", "12min", "4h18", "31h", "3d4h", "95d"."""
    s = int(seconds + 0.5)
    if s < 100:
        return f"{s}s"
    minutes = int(seconds / 60 + 0.5)
    if minutes < 100:
        return f"{minutes}min"
    if minutes < 24 * 60:
        return f"{minutes // 60}h{minutes % 60:02d}"
    hours = int(seconds / 3600 + 0.5)
    if hours < 100:
        return f"{hours}h"
    return f"{hours // 24}d" if hours >= 240 else f"{hours // 24}d{hours % 24}h"


def event_name(of: str) -> str:
    """Return what a forecast is of, in words: "rupture", "1 % strain", "0.2 % offset"."""
    if m := re.fullmatch(r"(strain|offset)_([0-9p.]+)_percent", of):
        return f"{m[2].replace('p', '.')} % {m[1]}"
    return of.replace("_", " ")


# --- pieces of a line -------------------------------------------------------------------


class Piece(NamedTuple):
    """A cell of a row: text in a fixed width, and how dearly it is kept where room is short (0 = dearest)."""

    text: str
    width: int
    style: str = ""
    keep: int = 0
    right: bool = False


def say(*parts: str | tuple[str, str]) -> Text:
    """Return a line of text from strings and (string, style) pairs."""
    line = Text(no_wrap=True, overflow="crop", end="")
    for part in parts:
        text, style = (part, "") if isinstance(part, str) else part
        line.append(text, STYLES[style] or None)
    return line


def lay(pieces: Sequence[Piece], width: int, gap: str = " ") -> Text:
    """Return the pieces side by side, leaving out the least dear ones until they fit.

    Which are left out depends on widths alone, so the rows of a list stay aligned.
    """
    kept = [p for p in pieces if p.width > 0]
    while len(kept) > 1 and sum(p.width for p in kept) + len(gap) * (len(kept) - 1) > width:
        kept.remove(max(kept, key=lambda p: p.keep))
    line = Text(no_wrap=True, overflow="crop", end="")
    for i, p in enumerate(kept):
        line.append(gap if i else "")
        text = p.text if cell_len(p.text) <= p.width else set_cell_size(p.text, p.width)
        pad = " " * (p.width - cell_len(text))
        line.append(pad + text if p.right else text + pad, STYLES[p.style] or None)
    return line


def fit(line: Text, width: int, cut: str = "") -> Text:
    """Return the line in at most ``width`` cells, ending in ``cut`` where something was left out."""
    if line.cell_len > width:
        line = line.copy()
        line.truncate(max(width - cell_len(cut), 0))
        if width > cell_len(cut):
            line.append(cut)
    return line


def folded(text: str, width: int, most: int, cut: str) -> list[str]:
    """Return ``text`` on at most ``most`` lines of ``width`` cells, broken at blanks.

    What is left out shows as ``cut``.
    """
    if most < 1 or width < 1:
        return []
    lines: list[str] = []
    line = ""
    for whole in text.split():
        word = whole
        while cell_len(word) > width:  # a word longer than a line is broken anywhere
            if line:
                lines.append(line)
                line = ""
            lines.append(set_cell_size(word, width).rstrip() or word[0])
            word = word[len(lines[-1]) :]
        joined = f"{line} {word}" if line else word
        if cell_len(joined) <= width:
            line = joined
        else:
            lines.append(line)
            line = word
    if line:
        lines.append(line)
    if len(lines) > most:
        last = lines[most - 1]
        while cell_len(last) + 1 > width and last:
            last = last[:-1]
        lines = [*lines[: most - 1], last.rstrip() + cut]
    return lines


def beside(left: Text, right: Text, width: int) -> Text:
    """Return ``left`` and, at the right edge, ``right``, which keeps its room where both do not fit."""
    room = width - right.cell_len
    if room < 2:
        return fit(right, width)
    line = fit(left, room - 1).copy()
    line.append(" " * (room - line.cell_len))
    line.append_text(right)
    return line


def joined(parts: Iterable[Text], gap: str = "  ") -> Text:
    """Return the parts that are not empty, in one line."""
    line = Text(no_wrap=True, overflow="crop", end="")
    for part in parts:
        if part.cell_len:
            if line.cell_len:
                line.append(gap)
            line.append_text(part)
    return line
