"""Exit codes: whose fault it is, since that picks the remedy. ``upturn --help`` explains each."""

from __future__ import annotations

from typing import Final

OK: Final = 0
TROUBLE: Final = 1
USAGE: Final = 2
INPUT: Final = 3
BUSY: Final = 4
DAMAGED: Final = 5
BROKEN: Final = 74
"""EX_IOERR of sysexits.h: the service manager restarts."""
