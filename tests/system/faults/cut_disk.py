"""A disk whose power can be cut at any moment, again and again, of one recorded run.

:class:`Recorder` notes what a run does to the files of a folder, through SQLite and through plain calls;
the files are real, so the run notices nothing. :func:`after_cut` then says what a disk could hold had the
power gone after any of the notes:

- of a file, what was there at its last fsync, and of the writes since then nothing, everything, a
  beginning with the last write torn at any byte, or any of its sectors in any order;
- where an fsync failed, what it should have brought to the disk is lost with the power, though it is still
  read until then, and a later fsync of the same file succeeds (so does Linux: the pages are marked clean);
- of a folder, the names as of its last fsync, and of the changes since then (made, renamed, removed)
  nothing, everything, a beginning, or any of them.

So it is stricter than a journalling file system, which keeps the order of names. What is assumed: a sector
that is being written is a mixture of old and new bytes, and its neighbours are left alone (SQLite assumes
the same, https://www.sqlite.org/psow.html); a rename is one change; an fsync that returned told the truth.
"""

from __future__ import annotations

import errno
import os
import secrets
import sqlite3
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from random import Random
from typing import Any
from unittest.mock import patch

from sqlite_tap import tap

SECTOR = 512
Note = tuple[Any, ...]
"""What happened, then to what: see the methods of :class:`Recorder`."""


@dataclass(frozen=True, slots=True)
class Disk:
    """What lies in a folder: the bytes of each file, and the folders, by relative path."""

    files: dict[str, bytes] = field(default_factory=dict)
    folders: frozenset[str] = frozenset()

    def write_to(self, root: Path) -> None:
        """Make it in ``root``, which is made too."""
        root.mkdir(parents=True)
        for name in sorted(self.folders):
            (root / name).mkdir()
        for name, data in self.files.items():
            (root / name).write_bytes(data)

    @classmethod
    def read_from(cls, root: Path) -> Disk:
        paths = sorted(root.rglob("*"))
        return cls(
            {str(p.relative_to(root)): p.read_bytes() for p in paths if p.is_file()},
            frozenset(str(p.relative_to(root)) for p in paths if p.is_dir()),
        )


class Recorder:
    """Notes of everything that happens under ``root``; use it with :func:`recorded`."""

    def __init__(self, root: Path, before: Recorder | None = None) -> None:
        self.root = str(root)
        self.start = before.start if before else Disk.read_from(root)
        self.notes: list[Note] = list(before.notes) if before else []
        self._at = dict(before._at) if before else {name: i for i, name in enumerate(self.start.files)}
        self._made = before._made if before else len(self._at)
        self._sizes = {file: (root / name).stat().st_size for name, file in self._at.items()}
        self.room: int | None = None
        """Bytes by which files may still grow; None: as many as they like."""
        self.failing: dict[str, int] = {}
        """After so many more of these (``write``, ``sync``) each one fails, until the entry is taken out."""
        self.refusals = 0

    def so_far(self) -> Recorder:
        """Return the record up to now, to go on from."""
        return Recorder(Path(self.root), self)

    def say(self, what: str, value: int = 0) -> None:
        """Note something of the run itself (begun, acknowledged, opened)."""
        self.notes.append(("said", what, value))

    def said(self, what: str, upto: int | None = None) -> list[int]:
        """Return the values said so far, or among the first ``upto`` notes."""
        return [n[2] for n in self.notes[:upto] if n[:2] == ("said", what)]

    def _name(self, path: str | os.PathLike[str]) -> str | None:
        path = os.path.abspath(path)
        if path == self.root:
            return ""
        return path.removeprefix(self.root + "/") if path.startswith(self.root + "/") else None

    def refused(self, what: str, file: int, end: int) -> int:
        if file < 0:
            return 0
        if what in self.failing:
            self.failing[what] -= 1
            if self.failing[what] < 0:
                self.refusals += 1
                if what == "sync":
                    self.notes.append(("sync failed", file))
                return sqlite3.SQLITE_IOERR_FSYNC if what == "sync" else sqlite3.SQLITE_IOERR_WRITE
        growth = end - self._sizes.get(file, 0)
        if self.room is not None and growth > 0:
            if growth > self.room:
                self.refusals += 1
                return sqlite3.SQLITE_FULL
            self.room -= growth
        return 0

    def _meet(self, what: str, file: int, end: int) -> None:
        """Raise what a plain call is to meet."""
        code = self.refused(what, file, end)
        if code:
            number = errno.ENOSPC if code == sqlite3.SQLITE_FULL else errno.EIO
            raise OSError(number, os.strerror(number))

    # --- told by SQLite and by the plain calls ------------------------------------------------

    def opened(self, path: str) -> int:
        name = self._name(path)
        if name is None:
            return -1
        if name not in self._at:
            self._at[name] = self._made
            self.notes.append(("made", name, self._made))
            self._made += 1
        return self._at[name]

    def wrote(self, file: int, offset: int, data: bytes) -> None:
        if file >= 0:
            self.notes.append(("wrote", file, offset, data))
            self._sizes[file] = max(self._sizes.get(file, 0), offset + len(data))

    def truncated(self, file: int, size: int) -> None:
        if file >= 0:
            self.notes.append(("truncated", file, size))
            self._sizes[file] = size

    def synced(self, file: int) -> None:
        if file >= 0:
            self.notes.append(("synced", file))

    def deleted(self, path: str) -> None:
        name = self._name(path)
        if name is not None and self._at.pop(name, None) is not None:
            self.notes.append(("removed", name))

    def folder_synced(self, path_inside: str) -> None:
        name = self._name(os.path.dirname(path_inside))
        if name is not None:
            self.notes.append(("folder synced", name))

    def renamed(self, old: str, new: str) -> None:
        a, b = self._name(old), self._name(new)
        if a is not None and b is not None and a in self._at:
            self._at[b] = self._at.pop(a)
            self.notes.append(("renamed", a, b))

    def folder_made(self, path: str) -> None:
        name = self._name(path)
        if name:
            self.notes.append(("folder", name))

    # --- plain calls --------------------------------------------------------------------------

    def calls(self) -> Iterator[tuple[str, Callable[..., Any]]]:
        """Yield the functions of ``os`` that change files, each telling of what it did."""
        usual: dict[str, Any] = {
            n: getattr(os, n) for n in ("open", "pwrite", "fsync", "rename", "unlink", "mkdir")
        }

        def where(fd: int) -> str:
            return os.readlink(f"/proc/self/fd/{fd}")

        def opens(path: Any, flags: int, *more: Any, **named: Any) -> int:
            fd = int(usual["open"](path, flags, *more, **named))
            if flags & os.O_CREAT:
                self.opened(os.fspath(path))
            return fd

        def pwrites(fd: int, data: bytes, offset: int) -> int:
            file = self.opened(where(fd))
            self._meet("write", file, offset + len(data))
            n = int(usual["pwrite"](fd, data, offset))
            self.wrote(file, offset, bytes(data[:n]))
            return n

        def fsyncs(fd: int) -> None:
            path = where(fd)
            if not os.path.isdir(path):
                self._meet("sync", self.opened(path), 0)
            usual["fsync"](fd)
            if os.path.isdir(path):
                self.folder_synced(path + "/.")
            else:
                self.synced(self.opened(path))

        def renames(old: Any, new: Any, **named: Any) -> None:
            usual["rename"](old, new, **named)
            self.renamed(os.fspath(old), os.fspath(new))

        def unlinks(path: Any, **named: Any) -> None:
            usual["unlink"](path, **named)
            self.deleted(os.fspath(path))

        def makes(path: Any, *more: Any, **named: Any) -> None:
            usual["mkdir"](path, *more, **named)
            self.folder_made(os.fspath(path))

        yield from zip(usual, (opens, pwrites, fsyncs, renames, unlinks, makes), strict=True)


@contextmanager
def recorded(root: Path, random: Random, before: Recorder | None = None) -> Iterator[Recorder]:
    """Record what happens under ``root`` meanwhile. Names and salts that are drawn come from ``random``.

    The record goes on from ``before`` where ``root`` holds a copy of that one's files: the process ended
    there and another one began, but the power stayed on.
    """
    listening = tap()
    assert listening is not None, "the caller skips where there is none"
    recorder = Recorder(root, before)
    with ExitStack() as stack:
        stack.enter_context(listening.used(recorder, random))
        stack.enter_context(patch.object(secrets, "token_hex", lambda n: random.randbytes(n).hex()))
        for name, call in list(recorder.calls()):
            stack.enter_context(patch.object(os, name, call))
        yield recorder


def after_cut(recorder: Recorder, upto: int, random: Random) -> Disk:
    """Return one of the disks that a power cut after the first ``upto`` notes can leave."""
    content, unsynced, names, changes = _state(recorder, upto)
    kept = _some(changes, random)
    for change in kept:
        _change(names, change)
    files: dict[int, bytes] = {}
    for _, value in sorted((n, v) for n, v in names.items() if v is not None):
        if value not in files:
            files[value] = _torn(content.get(value, b""), unsynced.get(value, []), random)
    folders = frozenset(n for n, v in names.items() if v is None and _reachable(n, names))
    found = {n: files[v] for n, v in names.items() if v is not None and _reachable(n, names)}
    for name in sorted(found):
        if name.endswith("-wal") and random.random() < 0.3:  # its index lies in memory: anything may be there
            found[name.removesuffix("-wal") + "-shm"] = random.randbytes(32768)
    return Disk(found, folders)


def as_written(recorder: Recorder) -> Disk:
    """Return what lies there with the power on, by the notes alone: they are complete where this is true."""
    content, unsynced, names, changes = _state(recorder, len(recorder.notes))
    for change in changes:
        _change(names, change)
    files = {n: v for n, v in names.items() if v is not None}
    return Disk(
        {n: _applied(content.get(v, b""), unsynced.get(v, [])) for n, v in files.items()},
        frozenset(n for n, v in names.items() if v is None),
    )


Names = dict[str, int | None]
"""What each name stands for on the disk: a file's number, or None for a folder."""


def _state(
    recorder: Recorder, upto: int
) -> tuple[dict[int, bytes], dict[int, list[Note]], Names, list[Note]]:
    """Return the fsynced bytes and the writes since, a file; the fsynced names and the changes since."""
    names: Names = {n: i for i, n in enumerate(recorder.start.files)}
    names |= dict.fromkeys(recorder.start.folders)
    content = dict(enumerate(recorder.start.files.values()))
    unsynced: dict[int, list[Note]] = {}
    changes: list[tuple[set[str], Note]] = []
    for note in recorder.notes[:upto]:
        if note[0] in ("wrote", "truncated"):
            unsynced.setdefault(note[1], []).append(note)
        elif note[0] == "synced":
            content[note[1]] = _applied(content.get(note[1], b""), unsynced.pop(note[1], []))
        elif note[0] == "sync failed":
            unsynced.pop(note[1], None)
        elif note[0] in ("made", "folder", "removed"):
            changes.append(({os.path.dirname(note[1])}, note))
        elif note[0] == "renamed":
            changes.append(({os.path.dirname(note[1]), os.path.dirname(note[2])}, note))
        elif note[0] == "folder synced":
            for where, change in changes:
                where.discard(note[1])
                if not where:
                    _change(names, change)
            changes = [c for c in changes if c[0]]
    return content, unsynced, names, [change for _, change in changes]


def _change(names: Names, change: Note) -> None:
    what, name, *more = change
    if what == "made":
        names[name] = more[0]
    elif what == "folder":
        names[name] = None
    elif what == "removed":
        names.pop(name, None)
    elif name in names:
        names[more[0]] = names.pop(name)


def _reachable(name: str, names: Names) -> bool:
    above = os.path.dirname(name)
    return not above or (above in names and _reachable(above, names))


def _some(notes: list[Note], random: Random) -> list[Note]:
    """Return none of the notes, all, the first few, or any of them."""
    how = random.randrange(4)
    if how == 0:
        return []
    if how == 1:
        return notes
    if how == 2:
        return notes[: random.randint(0, len(notes))]
    return [note for note in notes if random.random() < 0.5]


def _applied(data: bytes, notes: list[Note]) -> bytes:
    out = bytearray(data)
    for note in notes:
        if note[0] == "truncated":
            del out[note[2] :]
            out.extend(bytes(note[2] - len(out)))
        else:
            offset, new = note[2], note[3]
            out.extend(bytes(max(offset - len(out), 0)))
            out[offset : offset + len(new)] = new
    return bytes(out)


def _torn(data: bytes, notes: list[Note], random: Random) -> bytes:
    """Return ``data`` with some of what was written since: see the head of the module."""
    how = random.randrange(4)
    if not notes or how == 0:
        return data
    if how == 1:
        return _applied(data, notes)
    if how == 2:
        kept = notes[: random.randint(1, len(notes))]
        return _applied(data, [*kept[:-1], _beginning(kept[-1], random)])
    share = random.choice((0.1, 0.5, 0.9))
    sectors = [piece for note in notes for piece in _sectors(note) if random.random() < share]
    if sectors:
        i = random.randrange(len(sectors))
        sectors[i] = _beginning(sectors[i], random)
    return _applied(data, sectors)


def _beginning(note: Note, random: Random) -> Note:
    if note[0] == "truncated":
        return note
    return (*note[:3], note[3][: random.randint(0, len(note[3]))])


def _sectors(note: Note) -> Iterator[Note]:
    """Yield a write cut at the borders of the disk's sectors."""
    if note[0] == "truncated":
        yield note
        return
    _, file, offset, data = note
    at = 0
    while at < len(data):
        n = SECTOR - (offset + at) % SECTOR
        yield ("wrote", file, offset + at, data[at : at + n])
        at += n
