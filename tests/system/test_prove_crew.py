"""Campaigns on workers: nothing lost, nothing mixed, the same figures on any number of them."""

from __future__ import annotations

import json
import os
import signal
import sys
from collections.abc import Iterator
from concurrent.futures import Executor, Future
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from typing import Any

import pytest

from daq.prove import crew as crews
from daq.prove.crew import Crew, cluster, processes, work_through
from daq.prove.frame import ProveError
from daq.prove.rows import Rows

HEAD = {"format": "upturn-prove-1", "seed": 1, "digest": "d"}


class Here(Executor):
    """Does the work at once, in this process."""

    def submit(self, fn: Any, /, *args: Any, **named: Any) -> Future[Any]:
        future: Future[Any] = Future()
        try:
            future.set_result(fn(*args, **named))
        except Exception as error:
            future.set_exception(error)
        return future


@contextmanager
def _here() -> Iterator[Executor]:
    yield Here()


HERE = Crew(_here, 1)


def _square(job: int) -> dict[str, Any]:
    return {"index": job, "square": job * job}


def _deadly(folder: Path, job: int) -> dict[str, Any]:
    """Job 1 kills its worker always, job 2 the first time only."""
    mark = folder / str(job)
    if job == 1 or (job == 2 and not mark.exists()):
        mark.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    return _square(job)


def _fails_at_two(job: int) -> dict[str, Any]:
    if job == 2:
        raise ValueError("no such curve")
    return _square(job)


def test_every_job_is_done_once() -> None:
    """The bounded queue must neither drop a job nor do one twice."""
    done: list[int] = []
    outcome = work_through(HERE, _square, range(20), lambda job, _: done.append(job))
    assert (sorted(done), outcome.failed, outcome.stopped) == (list(range(20)), {}, False)


def test_work_that_raises_is_named_and_the_rest_goes_on() -> None:
    """One odd rig must not cost the campaign."""
    done: list[int] = []
    outcome = work_through(HERE, _fails_at_two, range(4), lambda job, _: done.append(job))
    assert (sorted(done), outcome.failed) == ([0, 1, 3], {2: "ValueError: no such curve"})


def test_a_worker_that_is_killed_loses_nothing_and_the_job_that_kills_is_named(tmp_path: Path) -> None:
    """A process pool breaks as a whole when one process dies; the others' work must be done again."""
    done: list[int] = []
    outcome = work_through(
        processes(2), partial(_deadly, tmp_path), range(4), lambda job, _: done.append(job)
    )
    assert sorted(done) == [0, 2, 3]
    assert list(outcome.failed) == [1]
    assert "died" in outcome.failed[1]


def test_the_first_interrupt_finishes_what_is_at_work_and_begins_nothing() -> None:
    """Ctrl-C must leave a record that the same command can go on with."""
    done: list[int] = []
    said: list[str] = []

    def take(job: int, _: dict[str, Any]) -> None:
        done.append(job)
        if job == 2:
            signal.raise_signal(signal.SIGINT)

    before = signal.getsignal(signal.SIGINT)
    outcome = work_through(HERE, _square, range(50), take, lambda: said.append("stopping"))
    assert (outcome.stopped, said) == (True, ["stopping"])
    assert set(done) >= {0, 1, 2}
    assert len(done) <= 3 + crews.AHEAD + 1
    assert signal.getsignal(signal.SIGINT) is before


def test_a_dask_cluster_does_what_processes_do() -> None:
    """Any executor of concurrent.futures will do; this one is of the extra ``cluster``."""
    distributed = pytest.importorskip("distributed", reason="the extra cluster is not installed")
    with distributed.LocalCluster(
        n_workers=1, threads_per_worker=2, processes=False, protocol="tcp", dashboard_address="127.0.0.1:0"
    ) as local:
        done: dict[int, Any] = {}
        found = cluster(local.scheduler_address)
        outcome = work_through(found, _square, range(6), done.__setitem__)
    assert (found.workers, outcome.failed) == (2, {})
    assert done == {i: _square(i) for i in range(6)}


def test_without_the_extra_a_cluster_is_refused_with_the_remedy(monkeypatch: pytest.MonkeyPatch) -> None:
    """Most laboratories have no cluster, so its package is not asked for."""
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(ProveError, match=r"--cluster: got no package distributed, wanted the extra cluster"):
        cluster("tcp://127.0.0.1:1")


def test_rows_are_gone_on_with_and_a_torn_last_line_is_left_out(tmp_path: Path) -> None:
    """A power cut may tear the line that was being written, never one before it."""
    with Rows(HEAD, tmp_path) as rows:
        rows.add(_square(0))
        rows.add(_square(7))
    path = tmp_path / "rows.jsonl"
    path.write_bytes(path.read_bytes()[:-5])
    with Rows(HEAD, tmp_path) as rows:
        assert rows.known == {0: _square(0)}
        rows.add(_square(7))
    with Rows(HEAD, tmp_path) as rows:
        assert rows.known == {0: _square(0), 7: _square(7)}


def test_a_torn_header_begins_the_file_anew(tmp_path: Path) -> None:
    """The very first line may be the one that is torn."""
    with Rows(HEAD, tmp_path):
        pass
    path = tmp_path / "rows.jsonl"
    path.write_bytes(path.read_bytes()[:10])
    with Rows(HEAD, tmp_path) as rows:
        rows.add(_square(1))
    assert [json.loads(line) for line in path.read_text().splitlines()] == [HEAD, _square(1)]


def test_rows_of_another_campaign_are_never_mixed_in(tmp_path: Path) -> None:
    """A figure made of two seeds or of two rule sets would be of neither."""
    with Rows(HEAD, tmp_path) as rows:
        rows.add(_square(0))
    before = (tmp_path / "rows.jsonl").read_bytes()
    with pytest.raises(ProveError, match=r"rows.jsonl:1: got a campaign with seed 1 \(now 2\)"):
        Rows({**HEAD, "seed": 2}, tmp_path)
    assert (tmp_path / "rows.jsonl").read_bytes() == before


@pytest.mark.parametrize("text", ["time_s,left\n0,1\n", "my notes"])
def test_a_file_that_is_no_campaign_is_not_written_over(tmp_path: Path, text: str) -> None:
    """Somebody else's rows.jsonl stays as it is."""
    (tmp_path / "rows.jsonl").write_text(text)
    with pytest.raises(ProveError, match="got a file that is no campaign"):
        Rows(HEAD, tmp_path)
    assert (tmp_path / "rows.jsonl").read_text() == text


def test_two_campaigns_do_not_write_in_one_folder(tmp_path: Path) -> None:
    """Both would do every rig, and their lines could tear each other."""
    with Rows(HEAD, tmp_path), pytest.raises(ProveError, match="got a campaign that is running"):
        Rows(HEAD, tmp_path)
