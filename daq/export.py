"""The record as plain files: raw readings as a recording, findings as JSON lines."""

from __future__ import annotations

import sys
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TextIO

import numpy as np

from daq.lines import iso_utc, json_line
from daq.records import Finding, RulesAdopted, ScansTaken, UpturnError
from daq.store.journal import JournalReader


class ExportError(UpturnError):
    """What was asked for is not in the record, or cannot be written."""


def write_recording(reader: JournalReader, frame: str, out: TextIO) -> int:
    """Write the raw readings of ``frame`` in the recording format; return the number of scans.

    A bad reading is an empty cell. Numbers are written so that reading them gives the same
    double. Where the channels changed, the file has the columns of the last layout only for the
    scans that had them; others are empty.

    Raises:
        ExportError: the journal has no scans of that frame.
    """
    columns: list[str] = []
    for _, fact in reader.facts(frame=frame):
        if isinstance(fact, ScansTaken) and fact.frame == frame:
            columns += [c for c in fact.channels if c not in columns]
    if not columns:
        raise ExportError(
            f"{reader.folder}: no scans of frame {frame!r}; frames here: {', '.join(reader.frames())}"
        )
    out.write(f"# raw readings of frame {frame}; instrument units, before any conversion\n")
    for _, fact in reader.facts(frame=frame):
        if isinstance(fact, RulesAdopted):
            out.write(f"# rules of {fact.test}: {fact.rules}\n")
    out.write(",".join(["time", *columns]) + "\n")
    scans = 0
    for _, fact in reader.facts(frame=frame):
        if isinstance(fact, ScansTaken) and fact.frame == frame:
            scans += len(fact)
            out.writelines(_rows(fact, columns))
    return scans


def _rows(fact: ScansTaken, columns: list[str]) -> Iterator[str]:
    at = [fact.channels.index(c) if c in fact.channels else -1 for c in columns]
    usable = ~np.isnan(fact.values) & (fact.quality < 64)
    for i, tick in enumerate(fact.utc_tick.tolist()):
        cells = [repr(float(fact.values[i, j])) if j >= 0 and usable[i, j] else "" for j in at]
        yield ",".join([iso_utc(tick), *cells]) + "\n"


def in_order(findings: Iterable[Finding]) -> list[Finding]:
    """Return findings by time, then by frame, each test's own in the order it made them.

    The journal commits frames as they come in; a replay of sealed chunks meets them in another
    interleaving. Sorted so, both give the same text.
    """
    return sorted(findings, key=lambda f: (f.at_tick, f.frame))


def write_findings(findings: Iterable[Finding], out: TextIO) -> int:
    """Write one JSON line a finding; return how many."""
    count = 0
    for finding in in_order(findings):
        out.write(json_line(finding, iso_utc) + "\n")
        count += 1
    return count


@contextmanager
def open_out(path: Path) -> Iterator[TextIO]:
    """Open ``path`` for writing text, '-' for stdout, which stays open.

    Raises:
        ExportError: it cannot be written.
    """
    if str(path) == "-":
        yield sys.stdout
        return
    try:
        out = path.open("w", encoding="utf-8", newline="\n")
    except OSError as error:
        raise ExportError(f"{path}: cannot write: {error.strerror}") from error
    with out:
        yield out
