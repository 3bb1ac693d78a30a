"""``upturn prove``: arguments in, a campaign, words out."""

from __future__ import annotations

import signal
import sys
import time
from argparse import Namespace
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Final, TextIO

from daq import settings
from daq.exits import OK, TROUBLE
from daq.prove import campaign, plot, say
from daq.prove.crew import Crew, cluster, processes
from daq.prove.frame import Likeness, ProveError, describe, likeness, test_of
from daq.prove.rows import Rows, header, measured_before

LINE_EVERY_S: Final = 30.0
"""Time between two lines of progress where there is no terminal."""
ADVICE: Final = "simulated rigs; advises only"


def prove(args: Namespace) -> int:
    """Run or go on with the campaign that ``args`` asks for; print its table."""
    lab = settings.load(args.lab)
    _, rules = test_of(lab, args.frame)
    before = measured_before(args.out, rules.test)
    what = likeness(lab, args.frame, tuple(args.curve or ()), args.scans, args.like, before)
    crew = cluster(args.cluster) if args.cluster else processes(args.workers)
    with Rows(header(what, args.seed), args.out) as rows:
        there = sum(i in rows.known for i in range(args.rigs))
        for line in opening(what, crew, args, there):
            print(f"upturn prove: {line}", file=sys.stderr)
        with _progress(args.rigs, there, sys.stderr) as tick:
            outcome = campaign.run(what, args.seed, args.rigs, crew, rows, tick, _stopping)
        told = campaign.result(what, args.seed, args.rigs, rows, outcome.failed)
        done = told["figures"]["rigs"]
        if done:
            print(f"{rules.test}: {done} simulated rigs alike, seed {args.seed} ({ADVICE})")
            print("\n".join(say.lines(told["figures"], rules.false_share)))
        if args.out is not None and done:
            written = ", ".join(str(p) for p in campaign.write(args.out, told, rows))
            print(f"upturn prove: wrote {written}", file=sys.stderr)
            if not plot.available():
                note = (
                    "no plot: the package matplotlib is not here (extra plots: pip install 'upturn[plots]')"
                )
                print(f"upturn prove: {note}", file=sys.stderr)
    for index, why in sorted(outcome.failed.items()):
        print(f"upturn prove: rig {index}: left out: {why}", file=sys.stderr)
    if outcome.stopped:
        on = (
            "the same command goes on from here"
            if args.out
            else "name a folder with --out to be able to go on"
        )
        print(f"upturn prove: stopped after {done} of {args.rigs} rigs; {on}", file=sys.stderr)
        return 128 + signal.SIGINT
    return TROUBLE if outcome.failed else OK


def opening(what: Likeness, crew: Crew, args: Namespace, there: int) -> Iterator[str]:
    """Yield what the campaign is of, before it begins."""
    a, rules = what.alike, what.rules
    life = "life told" if rules.expected_rupture_h else "life not told, 30 h to 19 000 h"
    sampling = "scans as in the general population" if a.every_s is None else f"a scan every {a.every_s:g} s"
    yield (
        f"{rules.test}: {a.sides} side{'s' * (a.sides > 1)}, {a.thermocouples} thermocouples,"
        f" {life}, {sampling}, at most {a.most_scans} a rig"
    )
    words = describe(a.measured)
    yield f"noise {what.noise_from}{': ' * bool(words)}{words}"
    if a.kinds:
        yield f"curves only of {', '.join(a.kinds)}"
    kept = f", {there} there already" if there else ""
    where = "" if args.out is None else f", rows in {args.out}"
    yield f"{args.rigs} rigs on {crew.workers} workers{kept}{where}"


def _stopping() -> None:
    print("\nupturn prove: stopping: the rigs at work are finished first", file=sys.stderr, flush=True)


@contextmanager
def _progress(rigs: int, there: int, out: TextIO) -> Iterator[Callable[[], None]]:
    """Give a function to call after each rig: a bar on a terminal, else a line now and then."""
    if out.isatty():
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

        columns = (TextColumn("rigs"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
        with Progress(*columns, console=Console(file=out), transient=True) as bar:
            task = bar.add_task("rigs", total=rigs, completed=there)
            yield lambda: bar.advance(task)
        return
    done, last = there, time.monotonic()

    def tick() -> None:
        nonlocal done, last
        done += 1
        if time.monotonic() - last >= LINE_EVERY_S:
            last = time.monotonic()
            print(f"upturn prove: {done} of {rigs} rigs", file=out, flush=True)

    yield tick


__all__ = ["ProveError", "opening", "prove"]
