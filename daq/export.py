"""The record as plain files: raw readings as a recording, findings as JSON lines."""

from __future__ import annotations

import sys
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Protocol, TextIO

import numpy as np

from daq.core import timebase
from daq.core.timebase import TimeState
from daq.lines import iso_utc, json_line
from daq.records import (
    BAD,
    TICKS_PER_S,
    BurstTaken,
    ClockStepped,
    Fact,
    Finding,
    IntArray,
    RulesAdopted,
    ScansTaken,
    UpturnError,
)


class ExportError(UpturnError):
    """What was asked for is not in the record, or cannot be written."""


class Source(Protocol):
    """What gives the facts of a frame: a journal, or an archive."""

    @property
    def folder(self) -> Path:
        """Return where it is, for messages."""

    def frames(self) -> list[str]:
        """Return the frames that are there."""

    def facts(self, *, frame: str | None = None) -> Iterator[tuple[int, Fact]]:
        """Yield (seq, fact) in order."""


def columns_of(reader: Source, frame: str) -> list[str]:
    """Return the names of all channels that scans of ``frame`` ever had.

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
    return columns


def write_recording(reader: Source, frame: str, columns: list[str], out: TextIO) -> int:
    """Write the raw readings of ``frame`` in the recording format; return the number of scans.

    A bad reading is an empty cell. Numbers are written so that reading them gives the same
    double. Where the channels changed, a scan has empty cells for those it had not. Time is lab time: UTC
    when the test began, from there on the boot clock, so that a clock that was set bends no curve.
    """
    out.write(f"# raw readings of frame {frame}; instrument units, before any conversion\n")
    out.write("# time: UTC at the first fact, intervals by the boot clock, reboots bridged by UTC\n")
    clock, began = TimeState(), False
    scans = 0
    for _, fact in reader.facts(frame=frame):
        if isinstance(fact, RulesAdopted):
            out.write(f"# rules of {fact.test}: {fact.rules}\n")
            began = True
        if isinstance(fact, ScansTaken):
            if fact.frame != frame:
                continue
            if not scans:
                out.write(",".join(["time", *columns]) + "\n")
            began = True
            clock, tick = timebase.place(clock, fact)
            scans += len(fact)
            out.writelines(_rows(fact, tick, columns))
        elif began and not isinstance(fact, BurstTaken):
            clock, tick_now = timebase.place_stamp(clock, fact.stamp)
            if isinstance(fact, ClockStepped):
                out.write(f"# {iso_utc(tick_now)}: UTC was set by {fact.by_ticks / TICKS_PER_S:+.4f} s\n")
    return scans


def _rows(fact: ScansTaken, tick: IntArray, columns: list[str]) -> Iterator[str]:
    at = [fact.channels.index(c) if c in fact.channels else -1 for c in columns]
    usable = ~np.isnan(fact.values) & (fact.quality < BAD)
    for i, t in enumerate(tick.tolist()):
        cells = [repr(float(fact.values[i, j])) if j >= 0 and usable[i, j] else "" for j in at]
        yield ",".join([iso_utc(t), *cells]) + "\n"


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


def keep_apart(path: Path, keep: Path) -> None:
    """Check that ``path`` is no part of the source ``keep``, a file or a journal folder.

    Raises:
        ExportError: it is; writing there would destroy what is read.
    """
    real, source = path.resolve(), keep.resolve()
    if real == source or (source.is_dir() and source in real.parents):
        raise ExportError(f"{path}: got a place in the source {keep}, wanted another file to write")


@contextmanager
def open_out(path: Path, *, keep: Path | None = None) -> Iterator[TextIO]:
    """Open ``path`` for writing text, '-' for stdout, which stays open.

    Args:
        keep: The source, a file or a journal folder: nothing there may be written over.

    Raises:
        ExportError: it cannot be written, is part of the source, or the disk is full.
    """
    if str(path) == "-":
        yield sys.stdout
        return
    try:
        if keep is not None:
            keep_apart(path, keep)
        with path.open("w", encoding="utf-8", newline="\n") as out:
            yield out
    except BrokenPipeError:
        raise
    except OSError as error:
        raise ExportError(f"{path}: cannot write: {error.strerror or error}") from error
