"""Rigs on workers: whatever executor there is, nothing lost when a worker dies.

``work_through`` keeps a bounded number of jobs at an executor of ``concurrent.futures`` and hands each result
on as it comes. When the executor breaks (a worker was killed: out of memory, a crash below Python) it is
made anew and what was at work is done again, one job at a time, so that the job which kills its worker is
known: after it has done so ``MOST_DEATHS`` times while alone it is given up, and the rest goes on.
"""

from __future__ import annotations

import importlib
import multiprocessing
import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    ProcessPoolExecutor,
    wait,
)
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, field
from typing import Any, Final

from daq.prove.frame import ProveError

MOST_DEATHS: Final = 2
AHEAD: Final = 1
"""Jobs at the executor beyond one a worker: none waits for its job, few are lost when asked to stop."""

Work = Callable[[int], dict[str, Any]]
Opener = Callable[[], AbstractContextManager[Executor]]


@dataclass(frozen=True, slots=True)
class Crew:
    """Workers: how to get an executor (again), and how many jobs it can work on at once."""

    open: Opener
    workers: int


@dataclass(slots=True)
class Outcome:
    """What could not be done: job -> why. ``stopped`` by the user before the end."""

    failed: dict[int, str] = field(default_factory=dict)
    stopped: bool = False


def processes(workers: int | None = None) -> Crew:
    """Return a crew of processes on this machine, by default one a core.

    They are forked from a server process of their own that has loaded what they need: a fork of this process,
    which has threads, might hang, and a start from nothing costs seconds each. Ctrl-C is for the parent.
    """
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload(["daq.prove.campaign"])
    count = workers or len(os.sched_getaffinity(0))  # the cores that this process may use

    @contextmanager
    def opened() -> Iterator[Executor]:
        pool = ProcessPoolExecutor(
            count, mp_context=context, initializer=signal.signal,
            initargs=(signal.SIGINT, signal.SIG_IGN),
        )  # fmt: skip
        try:
            yield pool
        except KeyboardInterrupt:  # a second one: nobody wants to wait
            for process in multiprocessing.active_children():
                process.terminate()
            raise
        finally:
            pool.shutdown(wait=True, cancel_futures=True)

    return Crew(opened, count)


def cluster(address: str) -> Crew:
    """Return the workers of the dask cluster whose scheduler is at ``address`` (tcp://HOST:PORT).

    The same version of this program has to be installed where they run.

    Raises:
        ProveError: the extra ``cluster`` is not installed, nobody answers, or no worker is there.
    """
    try:
        client_of: Any = importlib.import_module("distributed").Client
    except ImportError as error:
        raise ProveError(
            "--cluster: got no package distributed, wanted the extra cluster: pip install 'upturn[cluster]'"
        ) from error
    try:
        client = client_of(address, timeout="10s", set_as_default=False)
    except (OSError, ValueError) as error:
        raise ProveError(f"--cluster: got no answer from {address} ({error}), wanted a scheduler") from error
    count = sum(client.ncores().values())
    client.close()
    if not count:
        raise ProveError(f"--cluster: got no worker at {address}, wanted at least one")

    @contextmanager
    def opened() -> Iterator[Executor]:
        with client_of(address, timeout="10s", set_as_default=False) as client:
            yield client.get_executor(pure=False)

    return Crew(opened, count)


def work_through(
    crew: Crew,
    work: Work,
    jobs: Iterable[int],
    done: Callable[[int, dict[str, Any]], None],
    stopping: Callable[[], None] = lambda: None,
) -> Outcome:
    """Run ``work`` on every job and call ``done(job, result)`` here as each comes, in no order.

    After Ctrl-C ``stopping`` is called and no job is begun any more; those at work are waited for and handed
    on. A second Ctrl-C is a KeyboardInterrupt. Work that raises is noted and does not end the rest.

    Raises:
        ProveError: executors break one after the other without a single result.
    """
    shift = _Shift(crew.workers, work, deque(jobs), done)
    with _one_interrupt(shift.outcome, stopping):
        idle = 0
        while shift.left and not shift.outcome.stopped:
            before = shift.results
            with crew.open() as executor:
                broke = shift.run(executor)
            idle = idle + 1 if broke and shift.results == before else 0
            if idle > MOST_DEATHS * (crew.workers + AHEAD + 1):
                raise ProveError(f"workers: got {idle} broken executors and no result, wanted one that works")
    return shift.outcome


@dataclass(slots=True)
class _Shift:
    """Jobs on their way: ``fresh`` ones, and ``suspects`` that were at work when an executor broke."""

    workers: int
    work: Work
    fresh: deque[int]
    done: Callable[[int, dict[str, Any]], None]
    outcome: Outcome = field(default_factory=Outcome)
    suspects: deque[int] = field(default_factory=deque)
    deaths: dict[int, int] = field(default_factory=dict)
    results: int = 0

    @property
    def left(self) -> bool:
        return bool(self.fresh or self.suspects)

    def run(self, executor: Executor) -> bool:
        """Work through what is left with one executor; say whether it broke before that."""
        at_work: dict[Future[dict[str, Any]], int] = {}
        lost: list[int] = []
        broken = False
        while True:
            if not (broken or self.outcome.stopped):
                broken = not self._hand_over(executor, at_work)
            if self.outcome.stopped:
                for future in [f for f in at_work if f.cancel()]:
                    self.fresh.appendleft(at_work.pop(future))
            if not at_work:
                break
            for future in wait(at_work, return_when=FIRST_COMPLETED).done:
                job = at_work.pop(future)
                if not self._take(future, job):
                    broken = True
                    lost.append(job)
        self._suspect(sorted(lost))
        return broken

    def _hand_over(self, executor: Executor, at_work: dict[Future[dict[str, Any]], int]) -> bool:
        """Keep the workers busy; a suspect works alone. Return False where the executor is broken."""
        while True:
            queue = self.suspects or self.fresh
            room = 1 if self.suspects else self.workers + AHEAD
            if not queue or len(at_work) >= room:
                return True
            try:
                future = executor.submit(self.work, queue[0])
            except BrokenExecutor:
                return False
            at_work[future] = queue.popleft()

    def _take(self, future: Future[dict[str, Any]], job: int) -> bool:
        """Hand on one result; return False where the executor broke under it."""
        try:
            result = future.result()
        except (BrokenExecutor, CancelledError):
            return False
        except Exception as error:  # whatever the work raised: it is named, and the rest goes on
            self.outcome.failed[job] = f"{type(error).__name__}: {error}"
        else:
            self.results += 1
            self.done(job, result)
        return True

    def _suspect(self, lost: list[int]) -> None:
        """Note the jobs that were at work when an executor broke; one that was alone has done it."""
        if len(lost) == 1:
            (job,) = lost
            self.deaths[job] = self.deaths.get(job, 0) + 1
            if self.deaths[job] >= MOST_DEATHS:
                self.outcome.failed[job] = f"its worker died {MOST_DEATHS} times"
                return
        self.suspects.extend(lost)


@contextmanager
def _one_interrupt(outcome: Outcome, stopping: Callable[[], None]) -> Iterator[None]:
    """Take the first Ctrl-C as a wish to stop; from the second on it is what it was before."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.getsignal(signal.SIGINT)

    def first(number: int, frame: object) -> None:
        signal.signal(signal.SIGINT, before)
        outcome.stopped = True
        stopping()

    signal.signal(signal.SIGINT, first)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)
