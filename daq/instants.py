"""ISO 8601 instants as a file writes them: to ticks, and back in the file's own zone and style."""

from __future__ import annotations

import re
from bisect import bisect_right
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone
from typing import Final

import numpy as np

from daq.records import TICKS_PER_S, IntArray

EPOCH: Final = datetime(1970, 1, 1, tzinfo=UTC)


@dataclass(slots=True)
class Style:
    """How a file writes its instants."""

    between: str
    zulu: bool
    colon: bool
    decimals: int


class Instants:
    """Instants of a ``time`` column: to ticks since 1970, and back as the file writes them."""

    def __init__(self) -> None:
        self._style: Style | None = None
        self._since: list[tuple[int, timedelta]] = []  # zone in force from this tick on

    def ticks(self, cells: list[str]) -> IntArray:
        """Return ticks since 1970 (UTC), rounded to 0.1 ms.

        Raises:
            ValueError: a cell that is not ISO 8601 with a zone.
        """
        instants = [datetime.fromisoformat(cell.strip()) for cell in cells]
        zones = [t.utcoffset() for t in instants]
        if None in zones:
            raise ValueError("an instant without a zone")
        since = [t - EPOCH for t in instants]
        ticks = np.array(
            [d.days * 864_000_000 + d.seconds * 10_000 + (d.microseconds + 50) // 100 for d in since],
            dtype=np.int64,
        )
        if self._style is None:
            self._style = _style_of(cells[0].strip())
        last = self._since[-1][1] if self._since else None
        if any(zone != last for zone in zones):
            for tick, zone in zip(ticks.tolist(), zones, strict=True):
                if zone != last and zone is not None:
                    self._since.append((tick, zone))
                    last = zone
            self._since.sort(key=lambda pair: pair[0])
        return ticks

    def text(self, tick: int) -> str:
        """Return ISO 8601 text in the zone in force at ``tick``."""
        style = self._style or Style("T", True, True, 0)
        at = max(bisect_right(self._since, tick, key=lambda pair: pair[0]) - 1, 0)
        zone = self._since[at][1] if self._since else timedelta()
        whole, part = divmod(tick, TICKS_PER_S)
        local = (EPOCH + timedelta(seconds=whole)).astimezone(timezone(zone))
        digits = f"{part:04d}".rstrip("0")
        digits = digits.ljust(style.decimals, "0")
        offset = "Z" if style.zulu and not zone else local.strftime("%z")
        if style.colon and len(offset) == 5:
            offset = f"{offset[:3]}:{offset[3:]}"
        stamp = local.strftime(f"%Y-%m-%d{style.between}%H:%M:%S")
        return f"{stamp}{'.' * bool(digits)}{digits}{offset}"


def _style_of(cell: str) -> Style:
    found = re.search(r"[.,](\d+)", cell)
    return Style(
        between=" " if " " in cell else "T",
        zulu=cell.upper().endswith("Z"),
        colon=re.search(r"[+-]\d{4}$", cell) is None,
        decimals=min(len(found.group(1)), 4) if found else 0,
    )
