"""What is done to a journal in a process that is killed, and what must be there afterwards."""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from store_child import fact_of

from daq.codec import encode_fact
from daq.records import Fact, ScansTaken
from daq.store.journal import Journal
from daq.store.verify import NOTE, verify

Order = Callable[..., bool]


@contextmanager
def fork_server() -> Iterator[Order]:
    """Have a child write in a folder; returns whether it was killed."""
    command = [sys.executable, str(Path(__file__).with_name("store_child.py"))]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as server:
        assert server.stdin
        assert server.stdout

        def send(folder: Path, **how: Any) -> bool:
            how |= {"folder": str(folder / "j"), "acked": str(folder / "acked")}
            server.stdin.write(json.dumps(how) + "\n")
            server.stdin.flush()
            return bool(json.loads(server.stdout.readline())["killed"])

        yield send
        server.stdin.close()


def acknowledged(folder: Path) -> int:
    path = folder / "acked"
    numbers = [int(line) for line in path.read_text().split()] if path.exists() else []
    return max(numbers, default=0)


def pieces(facts: Iterator[tuple[int, Fact]]) -> list[bytes]:
    """Return facts with blocks of scans cut into single scans."""
    out = []
    for _, f in facts:
        out += (
            [encode_fact(f.cut(i, i + 1)) for i in range(len(f))]
            if isinstance(f, ScansTaken)
            else [encode_fact(f)]
        )
    return out


def check(journal: Journal, acked: int, *, replaced: bool = False) -> int:
    """Assert that the journal holds whole batches, all up to ``acked`` among them; return its end.

    A host file that was ``replaced`` has no status until the next commit: it is made anew, not carried over.
    """
    last = journal.last_seq
    assert last >= acked
    for frame in ("H1", "H2"):
        wanted = ((s, fact_of(s)) for s in range(1, last + 1) if fact_of(s).frame in (frame, ""))
        assert pieces(journal.facts(frame=frame)) == pieces(wanted)
    if last:
        assert journal.status() == {"last": last} or (replaced and journal.status() == {})
        assert journal.has_finding(f"H1|S-1|stage|{last}|1")
        snapshot = journal.snapshot("H1")
        assert snapshot is not None
        assert (snapshot.seq, snapshot.data) == (last, str(last).encode())
        assert journal.outbox()[-1].id == f"m{last}"
    assert [t for t in verify(journal.folder) if t.kind != NOTE] == []
    return last
