"""Killed anywhere, the journal holds everything it acknowledged, in order, and nothing half done."""

from __future__ import annotations

import json
import os
import shutil
import sqlite3
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from random import Random
from typing import Any

import pytest
from store_cases import open_journal, quick_folder
from store_child import fact_of

from daq.codec import encode_fact
from daq.records import Fact, ScansTaken
from daq.store.journal import Journal
from daq.store.verify import NOTE, verify

Order = Callable[..., bool]
KILLS = int(os.environ.get("UPTURN_KILLS", "60"))
"""Kills at random moments; a long run sets the environment variable."""


@pytest.fixture(scope="module")
def order() -> Iterator[Order]:
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


def check(folder: Path, journal: Journal) -> int:
    """Assert that the journal holds whole batches, all acknowledged ones among them; return its end."""
    last = journal.last_seq
    assert last >= acknowledged(folder)
    for frame in ("H1", "H2"):
        wanted = ((s, fact_of(s)) for s in range(1, last + 1) if fact_of(s).frame in (frame, ""))
        assert pieces(journal.facts(frame=frame)) == pieces(wanted)
    if last:
        assert journal.status() == {"last": last}
        assert journal.has_finding(f"H1|S-1|stage|{last}|1")
        snapshot = journal.snapshot("H1")
        assert snapshot is not None
        assert (snapshot.seq, snapshot.data) == (last, str(last).encode())
        assert journal.outbox()[-1].id == f"m{last}"
    assert [t for t in verify(folder / "j") if t.kind != NOTE] == []
    return last


def test_kills_at_random_moments_lose_nothing_acknowledged(order: Order) -> None:
    """The hand that pulls the plug does not wait for a good moment; ten kills go into each record."""
    random = Random(20)
    grown = 0
    for _ in range(-(-KILLS // 10)):
        with quick_folder() as folder:
            before = 0
            for _ in range(10):
                order(folder, seed=random.randrange(1 << 30), after_s=random.random() ** 2 * 0.06)
                with open_journal(folder / "j") as journal:
                    last = check(folder, journal)
                    assert not any("damaged" in notice for notice in journal.notices)
                assert last >= before
                grown += last - before
                before = last
    assert grown > KILLS, "the children must have come to write something"


POINTS = [
    (point, count)
    for point, counts in {
        "commit.before": (1, 2, 9), "commit.after": (1, 2, 9), "checkpoint.before": (1, 3),
        "checkpoint.after": (1, 3), "seal.packed": (1, 2, 5),
        "seal.written": (1, 2, 5), "seal.moved": (1, 2, 5),
        "migrate.before": (1, 2), "migrate.inside": (1, 2), "migrate.after": (1, 2),
    }.items()
    for count in counts
]  # fmt: skip


@pytest.mark.parametrize(("point", "count"), POINTS)
def test_a_kill_at_a_named_point_loses_nothing_acknowledged(order: Order, point: str, count: int) -> None:
    """The moments that matter are few and short; random kills seldom hit them."""
    with quick_folder() as folder:
        assert order(folder, seed=count, point=point, count=count), "the child must get there"
        with open_journal(folder / "j") as journal:
            last = check(folder, journal)
        assert not order(folder, seed=count, commits=5)
        with open_journal(folder / "j") as journal:
            assert check(folder, journal) > last
            while journal.seal(whole=False):
                pass
            check(folder, journal)


@pytest.mark.parametrize("count", [1, 2, 3])
@pytest.mark.parametrize("point", ["recover.built", "recover.renamed", "recover.aside", "recover.done"])
def test_a_kill_while_a_damaged_file_is_replaced_is_carried_on(order: Order, point: str, count: int) -> None:
    """Recovery is the worst moment to be interrupted, and after a power cut a likely one."""
    with quick_folder() as folder:
        assert order(folder, seed=1, point="commit.after", count=30)
        host = folder / "j" / "journal.sqlite"
        connection = sqlite3.connect(host)
        connection.execute("PRAGMA user_version = 7")  # no longer what the table inside says
        connection.close()
        damaged = host.read_bytes()
        killed = order(folder, seed=2, point=point, count=count, commits=3)
        assert killed == (count == 1 or point == "recover.renamed")
        with open_journal(folder / "j") as journal:
            last = journal.last_seq
            assert last >= acknowledged(folder)
            assert [t for t in verify(folder / "j") if t.kind != NOTE] == []
            wanted = ((s, fact_of(s)) for s in range(1, last + 1) if fact_of(s).frame in ("H1", ""))
            assert pieces(journal.facts(frame="H1")) == pieces(wanted)
        aside = list((folder / "j" / "quarantine").rglob("journal.sqlite"))
        assert [p.read_bytes() for p in aside] == [damaged], "put aside once, as it was"


def test_an_io_error_is_final_and_what_was_acknowledged_stands(order: Order) -> None:
    """After a failed write nothing more may be acknowledged by that process; the next one goes on."""
    with quick_folder() as folder:
        assert not order(folder, seed=3, file_limit=400_000, checkpoint_bytes=1 << 30)
        text = (folder / "acked").read_text().splitlines()
        assert text[-1].startswith("JournalBroken: ")
        (folder / "acked").write_text("\n".join(text[:-1]))
        with open_journal(folder / "j") as journal:
            assert check(folder, journal) == int(text[-2])


def test_a_full_disk_refuses_a_batch_and_goes_on_when_there_is_room() -> None:
    """On a real file system with no room left: the state before stands, and the same process goes on."""
    unshare = shutil.which("unshare")
    script = str(Path(__file__).with_name("store_child.py"))
    mount = 'mount -t tmpfs -o size=600k tmpfs "$1" && exec "$2" "$3" "$1"'
    with quick_folder() as folder:
        command = [str(unshare), "-Urm", "sh", "-c", mount, "sh", str(folder), sys.executable, script]
        done = subprocess.run(command, capture_output=True, text=True, check=False) if unshare else None
        if done is None or "mount" in done.stderr or "unshare" in done.stderr:
            pytest.skip("no user name space here to mount a small disk in")
        assert done.stderr == ""
        assert json.loads(done.stdout) == ["JournalFull", "True", "JournalFull", "True"]
