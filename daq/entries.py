"""The one door for people: a spool folder of small files, each renamed into place whole.

Whoever may write into the folder may make entries; there is no listening socket. The
daemon turns each file into a fact, notes the file's name in the same transaction, and
only then removes it, so that a kill in between neither loses nor repeats an entry. What cannot be an
entry is set aside under another name and said; it is never read twice, and never stops the daemon.
"""

from __future__ import annotations

import json
import math
import os
import re
import stat
import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from daq.records import UpturnError

SPOOL = "spool"
ENTRIES = {
    "loaded": "the full load is on; test time begins",
    "ended": "the test was ended by hand (unloaded, stopped, or taken out)",
    "acknowledge": "the open alarms of the frame, or the one named, have been seen by a person",
    "reset": "an alarm that stays until a person lets it go (load off, journal trouble): its cause is gone",
    "shelve": "put one alarm aside for a stated time",
    "unshelve": "take a shelved alarm back",
    "note": "a remark for the record",
}
"""What can be told, and what it means."""
MAX_BYTES = 64 * 1024
REFUSED = "refused-"


class EntryError(UpturnError):
    """An entry that cannot be accepted; the message says what was got and what is wanted."""


@dataclass(frozen=True, slots=True)
class Entry:
    """One entry as it lies in the spool. ``age_s``: how long ago it was made [real s]."""

    file: str
    frame: str
    entry: str
    initials: str
    values: Mapping[str, Any] = field(default_factory=dict)
    note: str = ""
    age_s: float = 0.0


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
        EntryError: an unknown entry, empty initials, values that mean nothing, or a folder that no
            daemon has made.
    """
    _check(frame, entry, initials, dict(values or {}), note)
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
        part.unlink(missing_ok=True)
        raise EntryError(f"{spool}: cannot write the entry: {error.strerror}") from error
    return spool / name


def waiting(journal: Path) -> list[str]:
    """Return the names of what lies in the spool, oldest first.

    Raises:
        EntryError: the folder cannot be read.
    """
    spool = journal / SPOOL
    try:
        names = os.listdir(spool)
    except OSError as error:
        raise EntryError(f"{spool}: got {error.strerror}, wanted a folder to read entries from") from error
    return sorted(n for n in names if n[:1].isdigit() and n.endswith(".json"))


def read_entries(journal: Path, known: Sequence[str] | None = None) -> Iterator[Entry | EntryError]:
    """Yield what lies in the spool, oldest first. A bad file is set aside, and an EntryError names it.

    Args:
        known: Names of the tests there are (``FRAME`` or ``FRAME/POSITION``); an entry for another
            place is refused. None: any place.

    Raises:
        EntryError: the folder cannot be read, or a bad file cannot be set aside.
    """
    for name in waiting(journal):
        try:
            yield _read(journal / SPOOL / name, known)
        except (OSError, ValueError, KeyError, TypeError, RecursionError, EntryError) as error:
            why = f"got {error!r}, wanted an entry" if not isinstance(error, EntryError) else str(error)
            yield set_aside(journal, name, why)


def _read(path: Path, known: Sequence[str] | None) -> Entry:
    # a pipe or a device under this name must neither block nor feed us for ever
    handle = os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_NOFOLLOW | os.O_CLOEXEC)
    with os.fdopen(handle, "rb") as f:
        if not stat.S_ISREG(os.fstat(handle).st_mode):
            raise EntryError("got something that is no file, wanted a file")
        data = f.read(MAX_BYTES + 1)
    if len(data) > MAX_BYTES:
        raise EntryError(f"got more than {MAX_BYTES} bytes, wanted at most that")
    raw = json.loads(data, parse_constant=_number, parse_float=_number)
    if not isinstance(raw, dict):
        raise EntryError(f"got {type(raw).__name__}, wanted an object with frame, entry and initials")
    values, note = raw.get("values", {}), raw.get("note", "")
    _check(raw["frame"], raw["entry"], raw["initials"], values, note)
    entry = Entry(path.name, raw["frame"], raw["entry"], raw["initials"], values, note, _age_s(path.name))
    if known is not None:
        check_place(entry.frame, str(values.get("position", "")), known)
    return entry


def check_place(frame: str, position: str, known: Sequence[str]) -> None:
    """Check that an entry is for a test there is.

    Raises:
        EntryError: naming those there are.
    """
    places = {name.partition("/")[0] for name in known}
    named = f"{frame}/{position}" if position else frame
    if frame and not (named in known if position else frame in places):
        raise EntryError(f"frame: got {named!r}, wanted one of {', '.join((*known, 'host'))}")
    if position and not frame:
        raise EntryError(f"position: got {position!r} for the host, wanted it for a frame")


def set_aside(journal: Path, name: str, why: str) -> EntryError:
    """Rename a spool file out of the way and return what is to be said about it.

    Raises:
        EntryError: it cannot be renamed, and so would be read again and again.
    """
    path = journal / SPOOL / name
    aside = path.with_name(f"{REFUSED}{name}")
    try:
        path.rename(aside)
    except OSError as error:
        raise EntryError(f"{path}: cannot be set aside ({error.strerror}); {why}") from error
    return EntryError(f"{aside}: refused: {why}")


def forget(journal: Path, file: str) -> None:
    """Remove a spool file whose entry is in the record.

    Raises:
        EntryError: it cannot be removed. It is not taken twice all the same.
    """
    path = journal / SPOOL / file
    try:
        path.unlink(missing_ok=True)
    except OSError as error:
        raise EntryError(f"{path}: got {error.strerror}, wanted to remove what is in the record") from error


def _number(text: str) -> float:
    x = float(text)
    if not math.isfinite(x):
        raise EntryError(f"got the number {text}, wanted a finite one")
    return x


def _age_s(name: str) -> float:
    made = re.match(r"(\d{19,20})-", name)
    return max(0.0, (time.time_ns() - int(made[1])) / 1e9) if made else 0.0


def _check(frame: object, entry: object, initials: object, values: object, note: object) -> None:
    if not isinstance(frame, str) or not isinstance(note, str):
        raise EntryError(f"frame, note: got {frame!r}, {note!r}, wanted texts")
    if not isinstance(entry, str) or entry not in ENTRIES:
        raise EntryError(f"entry: got {entry!r}, wanted one of {', '.join(ENTRIES)}")
    if not isinstance(initials, str) or not re.fullmatch(r"\S(.{0,30}\S)?", initials):
        raise EntryError(f"initials: got {initials!r}, wanted 1 to 32 characters that say who you are")
    if not isinstance(values, dict):
        raise EntryError(f"values: got {values!r}, wanted an object")
    from daq.core import entered  # late: the list of commands needs the words above, not the whole core

    why = entered.wrong(entry, values)
    if why:
        raise EntryError(why)
    for text in (frame, initials, note, *_texts(values)):
        if not text.isprintable():  # half a character, a line's end, what a terminal would obey
            raise EntryError(f"got the text {text!r}, wanted printable characters")


def _texts(value: object) -> Iterator[str]:
    if isinstance(value, str):
        yield value
    elif isinstance(value, dict):
        for key, one in value.items():
            yield key
            yield from _texts(one)
    elif isinstance(value, list | tuple):
        for one in value:
            yield from _texts(one)
    elif isinstance(value, float) and not math.isfinite(value):
        raise EntryError(f"got the number {value}, wanted a finite one")
