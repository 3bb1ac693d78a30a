"""A fork server whose children write a journal until they are killed.

Started once as ``python store_child.py``; takes one JSON order a line on standard input, answers
with one JSON line. A child writes facts that follow from their sequence numbers alone, so that whoever looks
at the journal afterwards knows what must be there, and notes each acknowledged number in a file.
"""

from __future__ import annotations

import json
import os
import resource
import signal
import sys
import time
from collections.abc import Callable
from pathlib import Path
from random import Random
from typing import Any

from store_cases import entry, finding, open_journal, scans, started

from daq.records import Fact
from daq.store import chunks, journal
from daq.store.errors import JournalError
from daq.store.journal import Journal
from daq.store.rows import Batch, OutboxNew, Snapshot


def fact_of(seq: int) -> Fact:
    """Return the fact that stands under ``seq`` in every journal written here."""
    if seq % 17 == 1:
        return started(seq)
    frame = ("H1", "H2")[seq % 2]
    return entry(frame, seq) if seq % 13 == 5 else scans(frame, seq, 1 + seq % 3 // 2)


def batch_of(first: int, n: int, acked: tuple[int, ...] = ()) -> Batch:
    """Return a batch of ``n`` facts; its finding, message, snapshot and status tell where it ends."""
    last = first + n - 1
    return Batch(
        facts=tuple(fact_of(seq) for seq in range(first, last + 1)),
        findings=(finding(last),),
        outbox=(OutboxNew(f"m{last}", "t", str(last).encode()),),
        acked=acked,
        snapshots=(Snapshot("H1", None, "0.1.0", str(last).encode()),),
        status={"last": last},
    )


def write(
    folder: Path,
    seed: int,
    commits: int,
    hook: Callable[[str], None],
    begun: Callable[[int], None],
    acknowledged: Callable[[int], None],
) -> None:
    """Commit batches with seals and checkpoints between.

    ``begun`` and ``acknowledged`` are told the last number of each batch, before and after its commit.
    """
    random = Random(seed)
    with Journal.open(folder, site="hall-a", hook=hook) as j:
        hook("opened")
        for _ in range(commits):
            waiting = tuple(row.seq for row in j.outbox(limit=4))[:-3]
            batch = batch_of(j.last_seq + 1, random.choice((1, 1, 2, 5, 9)), waiting)
            begun(j.last_seq + len(batch.facts))
            acknowledged(j.commit(batch).stop - 1)
            if random.random() < 0.15:
                j.seal(whole=random.random() < 0.7)
            if random.random() < 0.1:
                j.checkpoint()
            if random.random() < 0.03:
                j.seal("H1", whole=False, finish=True)
        hook("closing")


def child(order: dict[str, Any]) -> None:
    """Do what ``order`` says; never returns to the server's code."""
    chunks.CHUNK_SCANS = 20  # type: ignore[misc]
    journal.CHECKPOINT_BYTES = order.get("checkpoint_bytes", 40_000)  # type: ignore[misc]
    left = int(order.get("count", 1))

    def hook(point: str) -> None:
        nonlocal left
        if point == order.get("point"):
            left -= 1
            if left == 0:
                os.kill(os.getpid(), signal.SIGKILL)

    if "file_limit" in order:
        resource.setrlimit(resource.RLIMIT_FSIZE, (order["file_limit"],) * 2)
    acked = os.open(order["acked"], os.O_WRONLY | os.O_CREAT | os.O_APPEND)
    try:
        write(
            Path(order["folder"]), order["seed"], order.get("commits", 200), hook,
            begun=lambda last: None,
            acknowledged=lambda last: os.write(acked, f"{last}\n".encode()),
        )  # fmt: skip
    except JournalError as error:
        os.write(acked, f"{type(error).__name__}: {error}\n".encode())


def serve() -> None:
    """Fork a child for each order; kill it after ``after_s`` where the order says so."""
    for line in sys.stdin:
        order = json.loads(line)
        pid = os.fork()
        if pid == 0:
            try:
                child(order)
            finally:
                os._exit(0)
        if "after_s" in order:
            time.sleep(order["after_s"])
            os.kill(pid, signal.SIGKILL)
        _, status = os.waitpid(pid, 0)
        print(json.dumps({"killed": os.WIFSIGNALED(status)}), flush=True)


def fill_disk(folder: Path) -> None:
    """On a disk of a few hundred kilobytes: commit until it is full, make room, go on."""
    (folder / "ballast").write_bytes(bytes(150_000))
    seen: list[str] = []
    with open_journal(folder / "j") as j:
        acknowledged = 0
        for _ in range(2):
            try:
                while True:
                    acknowledged = j.commit(batch_of(j.last_seq + 1, 20)).stop - 1
            except JournalError as error:
                seen.append(type(error).__name__)
            seen.append(str(j.last_seq == acknowledged and len(list(j.facts())) == acknowledged))
            (folder / "ballast").unlink(missing_ok=True)
    print(json.dumps(seen))


if __name__ == "__main__":
    if len(sys.argv) > 1:
        fill_disk(Path(sys.argv[1]))
    else:
        serve()
