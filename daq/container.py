"""The container of an archive: a plain zip without compression, whose bytes depend on its contents alone.

No times, no owners, one order: equal contents give equal bytes, so that the whole container can be
compared with what its contents make, down to the last byte of its directory.
"""

from __future__ import annotations

import hashlib
import re
import struct
import tempfile
import zipfile
from contextlib import suppress
from pathlib import Path, PurePosixPath
from typing import IO, Final

from daq.records import UpturnError

SUMS: Final = "SHA256SUMS"
_SUM_LINE: Final = re.compile(r"([0-9a-f]{64})  (\S.*)")
_NO_TIME: Final = (1980, 1, 1, 0, 0, 0)
_PIECE: Final = 1 << 20


class ContainerError(UpturnError):
    """It is no container of this kind, or cannot be read."""


def sha256_of(path: Path) -> str:
    """Return the SHA-256 (FIPS 180-4) of a file, in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def write_sums(folder: Path) -> None:
    """Write the list of checksums of all files under ``folder`` in the form that ``sha256sum -c`` reads."""
    names = [name for name in _names(folder) if name != SUMS]
    lines = [f"{sha256_of(folder / name)}  {name}\n" for name in names]
    (folder / SUMS).write_text("".join(lines), encoding="utf-8")


def write_container(folder: Path, path: Path) -> None:
    """Write everything under ``folder`` to the container ``path``."""
    with zipfile.ZipFile(path, "w", zipfile.ZIP_STORED) as container:
        for name in _names(folder):
            info = zipfile.ZipInfo(name, _NO_TIME)
            info.create_system, info.external_attr = 3, 0o100644 << 16
            info.file_size = (folder / name).stat().st_size
            with (folder / name).open("rb") as source, container.open(info, "w") as target:
                while piece := source.read(_PIECE):
                    target.write(piece)


def read_container(path: Path, into: Path) -> None:
    """Write what the container ``path`` holds to files in the folder ``into``, whether sound or not.

    Raises:
        ContainerError: it is no zip file, or it is cut short, or a name in it leads out of the folder.
    """
    try:
        with zipfile.ZipFile(path) as container:
            for info in container.infolist():
                place = PurePosixPath(info.filename)
                if place.is_absolute() or ".." in place.parts or info.is_dir() or "\\" in info.filename:
                    raise ContainerError(f"{path}: got the name {info.filename!r}, wanted one inside")
                if info.compress_type != zipfile.ZIP_STORED or info.file_size > path.stat().st_size:
                    raise ContainerError(f"{path} {info.filename}: got it packed, wanted it as it is")
                target = into / place
                target.parent.mkdir(parents=True, exist_ok=True)
                with container.open(info) as source, target.open("wb") as out:
                    _take(source, out)
    except (zipfile.BadZipFile, struct.error, ValueError, RuntimeError, EOFError, OverflowError) as error:
        raise ContainerError(f"{path}: got {error}, wanted a whole archive") from error
    except OSError as error:
        raise ContainerError(f"{path}: cannot be read: {error.strerror or error}") from error


def _take(source: IO[bytes], out: IO[bytes]) -> None:
    """Copy one file; one whose zip checksum is wrong is kept as far as it goes: the list of sums names it."""
    with suppress(zipfile.BadZipFile):
        while piece := source.read(_PIECE):
            out.write(piece)


def wrong_sums(folder: Path) -> list[tuple[str, str, str]]:
    """Compare the list of checksums with the files; return (name, got, wanted) of what differs."""
    try:
        lines = (folder / SUMS).read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        return [(SUMS, str(error), "the list of checksums")]
    listed: dict[str, str] = {}
    wrong = []
    for line in lines:
        if match := _SUM_LINE.fullmatch(line):
            listed[match[2]] = match[1]
        else:
            wrong.append((SUMS, repr(line), "a checksum and a name"))
    there = [name for name in _names(folder) if name != SUMS]
    wrong += [(name, "no such file", f"checksum {sum_[:16]}") for name, sum_ in listed.items()
              if name not in there]  # fmt: skip
    for name in there:
        if name not in listed:
            wrong.append((name, "a file that is not in the list", "none"))
        elif (found := sha256_of(folder / name)) != listed[name]:
            wrong.append((name, f"checksum {found[:16]}", listed[name][:16]))
    return wrong


def is_as_made(path: Path, folder: Path) -> bool:
    """Say whether the container ``path`` is, byte by byte, what the files in ``folder`` make."""
    with tempfile.NamedTemporaryFile(prefix="upturn-") as again:
        write_container(folder, Path(again.name))
        return sha256_of(Path(again.name)) == sha256_of(path)


def _names(folder: Path) -> list[str]:
    """Return the files under ``folder``, what a person reads first at the front."""
    names = [p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()]
    return sorted(names, key=lambda n: (n != "README.txt", n != SUMS, "/" in n, n))
