"""One campaign, from rigs to figures on disk: the same seed gives the same figures on any workers."""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from typing import Any, Final

from daq import __version__
from daq.prove import plot, table
from daq.prove.crew import Crew, Outcome, work_through
from daq.prove.frame import Likeness
from daq.prove.rows import Rows, header
from daq.prove.score import score
from simulator import alike
from simulator.rig import simulate

TABLE: Final = "table.json"
PLOT: Final = "evidence.png"
COST: Final = "cost.json"


def run_rig(likeness: Likeness, seed: int, index: int) -> dict[str, Any]:
    """Make rig ``index`` and return its row; runs on a worker, wherever that is."""
    return score(simulate(alike.draw(likeness.alike, seed, index)), likeness.rules, index)


def run(
    likeness: Likeness,
    seed: int,
    rigs: int,
    crew: Crew,
    rows: Rows,
    tick: Callable[[], None] = lambda: None,
    stopping: Callable[[], None] = lambda: None,
) -> Outcome:
    """Do the rigs of the campaign that ``rows`` does not hold yet; ``tick`` is called after each."""

    def done(index: int, row: dict[str, Any]) -> None:
        rows.add(row)
        tick()

    missing = [i for i in range(rigs) if i not in rows.known]
    return work_through(crew, partial(run_rig, likeness, seed), missing, done, stopping)


def result(likeness: Likeness, seed: int, rigs: int, rows: Rows, failed: Mapping[int, str]) -> dict[str, Any]:
    """Return what ``table.json`` holds: what the campaign was of, and its figures."""
    head = json.loads(json.dumps(header(likeness, seed)))
    mine = [row for index, row in rows.known.items() if index < rigs]
    return {
        **head,
        "advice": "simulated rigs; advises only",
        "false_share": likeness.rules.false_share,
        "asked": rigs,
        "failed": [{"rig": index, "why": why} for index, why in sorted(failed.items())],
        "figures": table.figures(mine),
    }


def write(folder: Path, told: Mapping[str, Any], rows: Rows) -> list[Path]:
    """Write table, cost and, where it can be drawn, the plot; return what was written.

    Each appears whole or not at all. CPU time stands apart: it is not the same twice.
    """
    cpu_s = sum(float(r["cpu_s"]) for r in rows.known.values())
    scans = sum(int(r["scans"]) for r in rows.known.values())
    cost = {"version": __version__, "rigs": len(rows.known), "scans": scans, "cpu_s": cpu_s}
    written = []
    for name, content in ((TABLE, told), (COST, cost)):
        with _whole(folder / name) as part:
            part.write_text(json.dumps(content, indent=1, sort_keys=True) + "\n", encoding="utf-8")
        written.append(folder / name)
    if plot.available() and told["figures"]["levels"]:
        with _whole(folder / PLOT) as part:
            rigs = f"{told['figures']['rigs']} simulated rigs alike, seed {told['seed']}"
            title = f"{told['test']}: {rigs} (advises only)"
            plot.draw(told["figures"], title, told["false_share"], part)
        written.append(folder / PLOT)
    return written


@contextmanager
def _whole(path: Path) -> Iterator[Path]:
    part = path.with_name(f".{path.stem}.part{path.suffix}")
    yield part
    os.replace(part, path)
