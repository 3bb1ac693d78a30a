"""Listen to what SQLite does to its files: the library that Python itself uses, not another one.

SQLite reaches the disk through a table of functions, its virtual file system (https://www.sqlite.org/vfs.html).
Here a second table is made with :mod:`ctypes` in the very library that the module ``sqlite3`` has loaded. It
hands each call on to the usual one, and tells a listener of every write, truncation, fsync and deletion.
The store under test needs no seam for it, and nothing else has to be installed.
"""

from __future__ import annotations

import _sqlite3
import ctypes
from collections.abc import Iterator
from contextlib import contextmanager
from ctypes import CFUNCTYPE, POINTER, c_char_p, c_int, c_int64, c_void_p
from random import Random
from typing import Any, ClassVar, Protocol

_OPEN = CFUNCTYPE(c_int, c_void_p, c_void_p, c_void_p, c_int, POINTER(c_int))
_DELETE = CFUNCTYPE(c_int, c_void_p, c_void_p, c_int)
_RANDOMNESS = CFUNCTYPE(c_int, c_void_p, c_int, c_void_p)
_SET_CALL = CFUNCTYPE(c_int, c_void_p, c_char_p, c_void_p)
_GET_CALL = CFUNCTYPE(c_void_p, c_void_p, c_char_p)
_OPEN_FOLDER = CFUNCTYPE(c_int, c_char_p, POINTER(c_int))
_CLOSE = CFUNCTYPE(c_int, c_void_p)
_WRITE = CFUNCTYPE(c_int, c_void_p, c_void_p, c_int, c_int64)
_TRUNCATE = CFUNCTYPE(c_int, c_void_p, c_int64)
_SYNC = CFUNCTYPE(c_int, c_void_p, c_int)


class Listener(Protocol):
    """Told of everything that happens to named files. Paths are absolute."""

    def opened(self, path: str) -> int:
        """Return a number for the file at ``path``, which was perhaps just made."""

    def refused(self, what: str, file: int, end: int) -> int:
        """Return SQLite's code for the error that a ``write`` up to byte ``end``, or a ``sync``, meets."""

    def wrote(self, file: int, offset: int, data: bytes) -> None: ...
    def truncated(self, file: int, size: int) -> None: ...
    def synced(self, file: int) -> None: ...
    def deleted(self, path: str) -> None: ...
    def folder_synced(self, path_inside: str) -> None: ...


class _Vfs(ctypes.Structure):
    """``sqlite3_vfs``, version 3."""

    _fields_: ClassVar[list[Any]] = [
        ("iVersion", c_int), ("szOsFile", c_int), ("mxPathname", c_int), ("pNext", c_void_p),
        ("zName", c_char_p), ("pAppData", c_void_p), ("xOpen", c_void_p), ("xDelete", c_void_p),
        ("xAccess", c_void_p), ("xFullPathname", c_void_p), ("xDlOpen", c_void_p), ("xDlError", c_void_p),
        ("xDlSym", c_void_p), ("xDlClose", c_void_p), ("xRandomness", c_void_p), ("xSleep", c_void_p),
        ("xCurrentTime", c_void_p), ("xGetLastError", c_void_p), ("xCurrentTimeInt64", c_void_p),
        ("xSetSystemCall", c_void_p), ("xGetSystemCall", c_void_p), ("xNextSystemCall", c_void_p),
    ]  # fmt: skip


class _Methods(ctypes.Structure):
    """``sqlite3_io_methods``, version 3."""

    _fields_: ClassVar[list[Any]] = [
        ("iVersion", c_int), ("xClose", c_void_p), ("xRead", c_void_p), ("xWrite", c_void_p),
        ("xTruncate", c_void_p), ("xSync", c_void_p), *[(f"other{i}", c_void_p) for i in range(13)],
    ]  # fmt: skip


def _address(function: Any) -> int:
    return int(ctypes.cast(function, c_void_p).value or 0)


class _Tap:
    """The second table. Made once a process and never freed: an open file may still point to it."""

    def __init__(self, library: ctypes.CDLL) -> None:
        self.listener: Listener | None = None
        self.random = Random(0)
        self._library = library
        library.sqlite3_vfs_find.restype = c_void_p
        library.sqlite3_vfs_find.argtypes = [c_char_p]
        library.sqlite3_vfs_register.argtypes = [c_void_p, c_int]
        library.sqlite3_vfs_unregister.argtypes = [c_void_p]
        library.sqlite3_randomness.argtypes = [c_int, c_void_p]
        library.sqlite3_randomness.restype = None
        self._usual = int(library.sqlite3_vfs_find(None))
        usual = _Vfs.from_address(self._usual)
        self._vfs = _Vfs.from_buffer_copy(usual)
        self._vfs.zName = b"tap"
        self._vfs.pNext = None
        self._files: dict[int, int] = {}
        self._methods: dict[int, tuple[_Methods, tuple[Any, ...]]] = {}
        self._usual_open = _OPEN(usual.xOpen)
        self._usual_delete = _DELETE(usual.xDelete)
        self._usual_folder = _OPEN_FOLDER(_GET_CALL(usual.xGetSystemCall)(self._usual, b"openDirectory"))
        self._set_call = _SET_CALL(usual.xSetSystemCall)
        self._kept = (
            _OPEN(self._open), _DELETE(self._delete), _RANDOMNESS(self._randomness),
            _OPEN_FOLDER(self._open_folder),
        )  # fmt: skip
        self._vfs.xOpen, self._vfs.xDelete, self._vfs.xRandomness = map(_address, self._kept[:3])

    @contextmanager
    def used(self, listener: Listener, random: Random) -> Iterator[None]:
        """Make it the default for connections opened meanwhile; ``random`` feeds SQLite's random numbers."""
        self.listener, self.random = listener, random
        self._library.sqlite3_vfs_register(ctypes.addressof(self._vfs), 1)
        self._set_call(self._usual, b"openDirectory", _address(self._kept[3]))
        self._library.sqlite3_randomness(0, None)  # begin anew, from the default's source
        try:
            yield
        finally:
            self._set_call(self._usual, b"openDirectory", None)
            self._library.sqlite3_vfs_register(self._usual, 1)
            self._library.sqlite3_vfs_unregister(ctypes.addressof(self._vfs))
            self._library.sqlite3_randomness(0, None)
            self.listener = None

    def _open(self, _: int, name: int | None, file: int, flags: int, out: Any) -> int:
        # the very pointer goes on: the usual function keeps it, and parameters of the URI lie behind it
        code = int(self._usual_open(self._usual, name, file, flags, out))
        if code == 0 and name and self.listener is not None:
            self._files[file] = self.listener.opened(ctypes.string_at(name).decode())
            methods = c_void_p.from_address(file)
            methods.value = self._listened(int(methods.value or 0))
        return code

    def _listened(self, address: int) -> int:
        """Return a table of a file's methods that tells of what the usual one at ``address`` does."""
        if address not in self._methods:
            usual = _Methods.from_address(address)
            close, write = _CLOSE(usual.xClose), _WRITE(usual.xWrite)
            truncate, sync = _TRUNCATE(usual.xTruncate), _SYNC(usual.xSync)

            def closed(file: int) -> int:
                self._files.pop(file, None)
                return int(close(file))

            def wrote(file: int, data: int, n: int, offset: int) -> int:
                code = self.listener.refused("write", self._files[file], offset + n) if self.listener else 0
                n = n if code == 0 else n // 2  # a write that fails may have begun
                code = int(write(file, data, n, offset)) or code
                if self.listener is not None:
                    self.listener.wrote(self._files[file], offset, ctypes.string_at(data, n))
                return code

            def truncated(file: int, size: int) -> int:
                code = int(truncate(file, size))
                if code == 0 and self.listener is not None:
                    self.listener.truncated(self._files[file], size)
                return code

            def synced(file: int, flags: int) -> int:
                code = self.listener.refused("sync", self._files[file], 0) if self.listener else 0
                code = code or int(sync(file, flags))
                if code == 0 and self.listener is not None:
                    self.listener.synced(self._files[file])
                return code

            table = _Methods.from_buffer_copy(usual)
            kept = (_CLOSE(closed), _WRITE(wrote), _TRUNCATE(truncated), _SYNC(synced))
            table.xClose, table.xWrite, table.xTruncate, table.xSync = map(_address, kept)
            self._methods[address] = (table, kept)
        return ctypes.addressof(self._methods[address][0])

    def _delete(self, _: int, name: int, sync_folder: int) -> int:
        if self.listener is not None:  # before: the folder's fsync, if wanted, happens inside
            self.listener.deleted(ctypes.string_at(name).decode())
        return int(self._usual_delete(self._usual, name, sync_folder))

    def _open_folder(self, path_inside: bytes, out: Any) -> int:
        if self.listener is not None:  # SQLite opens a folder only to fsync it
            self.listener.folder_synced(path_inside.decode())
        return int(self._usual_folder(path_inside, out))

    def _randomness(self, _: int, n: int, out: int) -> int:
        ctypes.memmove(out, self.random.randbytes(n), n)
        return n


_made: list[_Tap] = []


def tap() -> _Tap | None:
    """Return the tap of this process; None where Python's SQLite cannot be reached (linked in and hidden)."""
    if not _made:
        try:
            library = ctypes.CDLL(_sqlite3.__file__)
            found = library.sqlite3_vfs_find
            found.restype, found.argtypes = c_void_p, [c_char_p]
            usual = found(None)
        except (AttributeError, OSError):
            return None
        if not usual or _Vfs.from_address(usual).iVersion < 3 or _Vfs.from_address(usual).zName != b"unix":
            return None
        _made.append(_Tap(library))
    return _made[0]
