"""The rows of a campaign on disk: added as they come, gone on with after any end.

``rows.jsonl`` begins with a line that fixes what the campaign is of: program version, seed, test, the noise
that was measured, and a digest of rules and likeness. Rows of another campaign are never mixed in. A last
line that was torn (a power cut, a full disk) is left out and written anew. One campaign at a time may write
in a folder.
"""

from __future__ import annotations

import fcntl
import hashlib
import json
import os
from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from types import TracebackType
from typing import Any, Final, Self

from daq import __version__
from daq.codec import canonical_json
from daq.core.rules import rules_to_json
from daq.prove.frame import Likeness, ProveError
from simulator.alike import Measured

FORMAT: Final = "upturn-prove-1"
NAME: Final = "rows.jsonl"
VARYING: Final = ("cpu_s",)
"""Keys of a row that are not the same at every run."""


def header(likeness: Likeness, seed: int) -> dict[str, Any]:
    """Return the line that fixes a campaign; the number of rigs is left open, so that more can be added.

    It keeps the measured noise itself: a test that runs is measured anew each time, a campaign is not.
    """
    what = canonical_json([rules_to_json(likeness.rules), asdict(likeness.alike)])
    return {
        "format": FORMAT,
        "version": __version__,
        "seed": seed,
        "test": likeness.rules.test,
        "noise_from": likeness.noise_from,
        "measured": asdict(likeness.alike.measured),
        "digest": hashlib.sha256(what.encode()).hexdigest(),
    }


def measured_before(folder: Path | None, test: str) -> tuple[Measured, str] | None:
    """Return the noise of the campaign of ``test`` in ``folder``, and where it was from; None for none."""
    path = None if folder is None else folder / NAME
    if path is None or not path.exists():
        return None
    with path.open("rb") as file:
        head = _parsed(file.readline())
    if not isinstance(head, dict) or head.get("format") != FORMAT or head.get("test") != test:
        return None
    m = head["measured"]
    drift = None if m["drift"] is None else (float(m["drift"][0]), float(m["drift"][1]))
    return Measured(m["white"], drift, m["furnace_k"], m["room_k"]), head["noise_from"]


class Rows:
    """Rows by rig, in memory and, if there is a folder, on disk.

    Attributes:
        known: rig -> row, those read and those added.
    """

    def __init__(self, head: Mapping[str, Any], folder: Path | None) -> None:
        """Open the campaign ``head`` in ``folder``, which is made where it is not there yet.

        Raises:
            ProveError: the folder holds another campaign, something else, or is being written in.
            OSError: it cannot be read or written.
        """
        self.known: dict[int, dict[str, Any]] = {}
        self._file: int | None = None
        if folder is None:
            return
        folder.mkdir(parents=True, exist_ok=True)
        path = folder / NAME
        self._file = os.open(path, os.O_RDWR | os.O_CREAT | os.O_APPEND, 0o644)
        try:
            self._lock(path)
            self._read(path, dict(head))
        except BaseException:
            self.close()
            raise

    def add(self, row: dict[str, Any]) -> None:
        """Keep one row; it is in the file when this returns."""
        self.known[int(row["index"])] = row
        self._write(row)

    def close(self) -> None:
        if self._file is not None:
            os.close(self._file)
            self._file = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _lock(self, path: Path) -> None:
        assert self._file is not None
        try:
            fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            raise ProveError(f"{path}: got a campaign that is running, wanted a folder to itself") from None

    def _read(self, path: Path, head: dict[str, Any]) -> None:
        assert self._file is not None
        data = path.read_bytes()
        whole = data.rfind(b"\n") + 1
        lines = data[:whole].splitlines()
        if not lines:
            if data and not canonical_json(head).encode().startswith(data):
                raise ProveError(f"{path}: got a file that is no campaign, wanted one, or none at all")
            os.ftruncate(self._file, 0)
            self._write(head)
            return
        found = _parsed(lines[0])
        if not isinstance(found, dict) or found.get("format") != FORMAT:
            raise ProveError(f"{path}:1: got a file that is no campaign of this format, wanted {FORMAT}")
        head = json.loads(canonical_json(head))  # tuples become lists, as in the file
        if found != head:
            differing = [f"{k} {found.get(k)!r} (now {v!r})" for k, v in head.items() if found.get(k) != v]
            raise ProveError(
                f"{path}:1: got a campaign with {', '.join(differing)}, wanted the same as now; "
                "name another folder with --out"
            )
        for number, line in enumerate(lines[1:], 2):
            row = _parsed(line)
            if not isinstance(row, dict) or "index" not in row:
                raise ProveError(f"{path}:{number}: got a line that is no row, wanted one row of JSON a line")
            self.known[int(row["index"])] = row
        os.ftruncate(self._file, whole)

    def _write(self, line: Mapping[str, Any]) -> None:
        if self._file is None:
            return
        data = (canonical_json(line) + "\n").encode()
        while data:
            data = data[os.write(self._file, data) :]


def _parsed(line: bytes) -> Any:
    try:
        return json.loads(line)
    except ValueError:
        return None
