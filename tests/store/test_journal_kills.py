"""Killed while it recovers, or met by a broken or full disk, the journal keeps what it acknowledged."""

from __future__ import annotations

import json
import shutil
import sqlite3
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from kill_cases import Order, acknowledged, check, fork_server, pieces
from store_cases import open_journal, quick_folder
from store_child import fact_of

from daq.store.verify import NOTE, verify


@pytest.fixture(scope="module")
def order() -> Iterator[Order]:
    with fork_server() as order:
        yield order


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
            assert check(journal, acknowledged(folder)) == int(text[-2])


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
