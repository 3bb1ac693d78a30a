"""The one door for people: a spool folder of small files, each renamed into place whole.

Whoever may write into the folder may make entries; there is no listening socket. The
daemon turns each file into a fact, notes the file's name in the same transaction, and
only then removes it, so that a kill in between neither loses nor repeats an entry.
"""

from __future__ import annotations

import json
import os
import re
import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from daq.records import UpturnError

SPOOL = "spool"
ENTRIES = {
    "loaded": "the full load is on; test time begins",
    "ended": "the test was ended by hand (unloaded, stopped, or taken out)",
    "acknowledge": "the open alarms of the frame, or the one named, have been seen by a person",
    "shelve": "put one alarm aside for a stated time",
    "unshelve": "take a shelved alarm back",
    "note": "a remark for the record",
}
"""What can be told, and what it means."""
MAX_BYTES = 64 * 1024


class EntryError(UpturnError):
    """An entry that cannot be accepted; the message says what was got and what is wanted."""


@dataclass(frozen=True, slots=True)
class Entry:
    """One entry as it lies in the spool."""

    file: str
    frame: str
    entry: str
    initials: str
    values: Mapping[str, Any] = field(default_factory=dict)
    note: str = ""


def write_entry(
    journal: Path,
    frame: str,
    entry: str,
    initials: str,
    values: Mapping[str, Any] | None = None,
    note: str = "",
) -> Path:
    """Put one entry into the spool of the journal folder ``journal`` and return its path.

    Raises:
        EntryError: an unknown entry, empty initials, or a folder that no daemon has made.
    """
    _check(entry, initials)
    spool = journal / SPOOL
    if not spool.is_dir():
        raise EntryError(f"{spool}: no such folder; is {journal} the journal of a running daemon?")
    name = f"{time.time_ns():020d}-{os.getpid()}.json"
    text = json.dumps(
        {"frame": frame, "entry": entry, "initials": initials, "values": dict(values or {}), "note": note}
    )
    if len(text) > MAX_BYTES:
        raise EntryError(f"entry: got {len(text)} bytes, wanted at most {MAX_BYTES}")
    part = spool / f".{name}.part"
    try:
        with part.open("x", encoding="utf-8") as f:
            f.write(text)
            f.flush()
            os.fsync(f.fileno())
        part.rename(spool / name)
    except OSError as error:
        raise EntryError(f"{spool}: cannot write the entry: {error.strerror}") from error
    return spool / name


def read_entries(journal: Path) -> Iterator[Entry | EntryError]:
    """Yield what lies in the spool, oldest first. A bad file is set aside, and an EntryError names it."""
    for path in sorted((journal / SPOOL).glob("[0-9]*.json")):
        try:
            if path.stat().st_size > MAX_BYTES:
                raise EntryError(f"got {path.stat().st_size} bytes, wanted at most {MAX_BYTES}")
            raw = json.loads(path.read_text(encoding="utf-8"))
            entry = Entry(
                path.name,
                raw["frame"],
                raw["entry"],
                raw["initials"],
                raw.get("values", {}),
                raw.get("note", ""),
            )
            _check(entry.entry, entry.initials)
            yield entry
        except (OSError, ValueError, KeyError, TypeError, AttributeError, EntryError) as error:
            aside = path.with_name(f"refused-{path.name}")
            path.rename(aside)
            yield EntryError(f"{aside}: refused: {error}")


def forget(journal: Path, file: str) -> None:
    """Remove a spool file whose entry is in the record."""
    (journal / SPOOL / file).unlink(missing_ok=True)


def _check(entry: str, initials: str) -> None:
    if entry not in ENTRIES:
        raise EntryError(f"entry: got {entry!r}, wanted one of {', '.join(ENTRIES)}")
    if not isinstance(initials, str) or not re.fullmatch(r"\S(.{0,30}\S)?", initials):
        raise EntryError(f"initials: got {initials!r}, wanted 1 to 32 characters that say who you are")
