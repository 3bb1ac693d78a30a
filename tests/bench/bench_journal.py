"""Figures of the journal, each beside a baseline of the same run: ``python tests/bench/bench_journal.py``.

Times depend on the machine, ratios less; nothing here is asserted. ``--readings`` sizes the sealed part,
``--folder`` chooses the disk.
"""

from __future__ import annotations

import argparse
import itertools
import os
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

from daq.records import ScansTaken
from daq.store.journal import Journal
from daq.store.rows import Batch, Snapshot, encoded
from daq.store.verify import verify

CHANNELS = ("left", "right", "beam", "top", "mid", "bottom", "room", "output")


def rig(n: int, first: int = 0, seed: int = 1) -> ScansTaken:
    """Return ``n`` scans as instruments give them: three lengths [mm] and five slow channels.

    Counts of 0.1 um with 6 counts of noise, temperatures to 0.01 degC with 5 counts, one scan a second with
    a jitter of 1 ms.
    """
    rng = np.random.default_rng([seed, first])
    t = first + np.arange(n)
    creep = 1e-3 * t**0.4 + 1e-7 * t
    mm = [np.rint((creep + s * 0.01) * 1e4 + rng.normal(0, 6, n)) / 1e4 for s in (0, 1, 2)]
    slow = [
        np.rint((level + np.sin(t / 3000)) * 100 + rng.normal(0, 5, n)) / 100
        for level in (980, 981, 979, 23, 41)
    ]
    tick = (t * 10_000 + rng.integers(-5, 6, n)).astype(np.int64)
    values = np.stack([*mm, *slow], axis=1)
    return ScansTaken("H1", CHANNELS, "boot-1", tick, tick - 12345, values, np.zeros(values.shape, np.uint8))


def entropy_bits(x: np.ndarray) -> float:
    """Return the zero-order entropy of the differences of a column, in bits a value."""
    _, counts = np.unique(np.diff(x), return_counts=True)
    p = counts / counts.sum()
    return float(-(p * np.log2(p)).sum())


def timed(what: str, call: Callable[[], object], times: int) -> float:
    """Call it so often, print what a call takes; return the mean seconds of a call."""
    ms = np.empty(times)
    cpu, written = time.process_time(), written_bytes()
    for i in range(times):
        start = time.perf_counter()
        call()
        ms[i] = (time.perf_counter() - start) * 1e3
    cpu, written = (time.process_time() - cpu) / times * 1e3, (written_bytes() - written) / times
    p50, p99 = np.percentile(ms, [50, 99])
    line(
        what,
        f"p50 {p50:7.3f} ms  p99 {p99:7.3f} ms  {1e3 / ms.mean():5.0f} /s  CPU {cpu:.3f} ms {written:7.0f} B",
    )
    return float(ms.mean()) / 1e3


def line(what: str, figures: str) -> None:
    print(f"{what:42} {figures}")


def written_bytes() -> int:
    """Return the bytes this process has given to the kernel to write (0 where the system does not tell)."""
    path = Path("/proc/self/io")
    counts = dict(row.split(": ") for row in path.read_text().splitlines()) if path.exists() else {}
    return int(counts.get("wchar", 0))


def commits(folder: Path, n: int) -> None:
    """Time a bare write and fsync, then commits of one scan and of sixty-four."""
    fd = os.open(folder / "bare", os.O_RDWR | os.O_CREAT)

    def bare() -> None:
        os.pwrite(fd, bytes(4096), 0)
        os.fdatasync(fd)

    timed("baseline: write 4096 bytes, fdatasync", bare, n)
    os.close(fd)
    block = rig(4096)
    facts = [encoded(block.cut(i, i + 1)) for i in range(4096)]
    turn = itertools.cycle(facts)
    status = {"H1": {"stage": "primary", "rate_per_h": 1e-5, "curve": list(range(50))}}
    snapshot = Snapshot("H1", None, "0", os.urandom(20_000))
    with Journal.open(folder / "a", site="bench") as journal:
        timed("commit: one scan of 8 channels", lambda: journal.commit(Batch(facts=(next(turn),))), n)
        timed(
            "commit: the same, with a status", lambda: journal.commit(Batch((next(turn),), status=status)), n
        )
        timed("commit: a snapshot of 20 kB", lambda: journal.commit(Batch(snapshots=(snapshot,))), n // 4)
        many = timed("commit: sixty-four scans", lambda: journal.commit(Batch(tuple(facts[:64]))), n // 4)
        line("", f"{64 / many:,.0f} rows/s")
        journal.commit(Batch(tuple(facts)))
        timed("seal: one chunk of rows of one scan", lambda: journal.seal("H1"), 3)


def sealed(folder: Path, readings: int) -> None:
    """Fill a journal with whole chunks, then read, verify and reopen it."""
    scans = 4096
    chunks = max(1, readings // (scans * len(CHANNELS)))
    with Journal.open(folder / "b", site="bench") as journal:
        stored = 0
        start = time.perf_counter()
        for k in range(chunks):
            journal.commit(Batch(facts=(rig(scans, k * scans),)))
            stored += sum(s.stored_bytes for s in journal.seal("H1", whole=False))
        line("made", f"{chunks * scans * 8:,} readings in {time.perf_counter() - start:.1f} s")
        block = rig(scans * min(chunks, 8))
        counts = [np.rint(block.values[:, j] * (1e4 if j < 3 else 100)) for j in range(8)]
        bits = sum(entropy_bits(c) for c in counts) + entropy_bits(block.utc_tick)
        line(
            "bytes a reading, stamps and quality included",
            f"{stored / (chunks * scans * 8):.2f}   entropy of the differences: {bits / 8 / 8:.2f}",
        )
        total = (folder / "b" / "tests" / "H1.sqlite").stat().st_size
        line("bytes a reading, whole file", f"{total / (chunks * scans * 8):.2f}")
        start, cpu = time.perf_counter(), time.process_time()
        n = sum(f.values.size for _, f in journal.facts(frame="H1") if isinstance(f, ScansTaken))
        wall, cpu = time.perf_counter() - start, time.process_time() - cpu
        line(
            "sealed read: facts()",
            f"{n / wall / 1e6:.1f} M readings/s ({n / cpu / 1e6:.1f} M per CPU second)",
        )
        start = time.perf_counter()
        troubles = list(verify(folder / "b"))
        line(
            "verify", f"{n / (time.perf_counter() - start) / 1e6:.1f} M readings/s, {len(troubles)} troubles"
        )
    start = time.perf_counter()
    Journal.open(folder / "b", site="bench").close()
    line("open and close", f"{(time.perf_counter() - start) * 1e3:.0f} ms")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--folder", type=Path, help="where to write (default: a temporary folder)")
    parser.add_argument("--commits", type=int, default=1000)
    parser.add_argument("--readings", type=int, default=2_000_000)
    given = parser.parse_args()
    with tempfile.TemporaryDirectory(dir=given.folder) as name:
        commits(Path(name), given.commits)
        sealed(Path(name), given.readings)


if __name__ == "__main__":
    main()
