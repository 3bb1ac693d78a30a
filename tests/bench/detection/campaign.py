"""Campaign: the detector on the general population of simulated rigs, against truth and best possible delay.

    python tests/bench/detection/campaign.py --rigs 300 --seed 1 [--workers 2] [--levels] [--list]

Prints false detections with their exact (Clopper & Pearson 1934) interval, misses, delay over the best
possible one, detections after the 0.2 % offset, error of the least rate over the best possible standard
error, and how often its 90 % interval holds the truth. Same seed, same table, on any number of workers.
``upturn prove`` scores rigs like one frame in the same way.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path
from typing import Any

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")  # small matrices: threads only get in each other's way

from daq.core.block import Block  # noqa: E402
from daq.core.rules import ChannelRules, Loading, Role, Specimen, TestRules  # noqa: E402
from daq.prove import score, table  # noqa: E402
from daq.prove.exact import clopper_pearson  # noqa: E402
from daq.prove.say import lines  # noqa: E402
from daq.prove.score import limit_of  # noqa: E402
from simulator import population  # noqa: E402
from simulator.rig import Run, simulate  # noqa: E402

__all__ = ["block_of", "clopper_pearson", "limit_of", "rules_of", "run_one"]


def rules_of(run: Run) -> TestRules:
    """Return the rules that the rig's lab file would give."""
    frame = population.lab_settings(run.spec)["frames"]["H1"]
    channels = tuple(
        ChannelRules(name, Role(c["role"]), c.get("side", "")) for name, c in frame["channels"].items()
    )
    q = frame.get("activation_energy_kj_per_mol")
    return TestRules(
        "simulated",
        "H1",
        "H1",
        Specimen("S-1"),
        channels,
        stress_pa=frame["stress_mpa"] * 1e6,
        loading=Loading(frame["loading"]),
        set_point_c=frame["temperature_c"],
        activation_energy_j_per_mol=None if q is None else q * 1e3,
        stress_exponent=frame.get("stress_exponent"),
        expected_rupture_h=frame.get("expected_rupture_h"),
    )


def block_of(run: Run, rules: TestRules | None = None) -> Block:
    """Return the whole run as one block of converted scans."""
    return score.block_of(run)


def run_one(job: tuple[int, int], levels: tuple[float, ...] = ()) -> dict[str, Any]:
    """Run rig ``job`` (seed, index) of the population and return its row."""
    seed, index = job
    run = simulate(population.draw(seed, index))
    return score.score(run, rules_of(run), index, levels)


def run_levels(job: tuple[int, int]) -> dict[str, Any]:
    """Run one rig at every level of evidence."""
    return run_one(job, score.LEVELS)


def listed(rows: list[dict[str, Any]]) -> str:
    """Return the false, missed and late rigs, one paragraph each."""
    out = []
    for r in rows:
        late = table.fair_to_miss(r) and (r["true_h"] is None or table.is_late(r))
        if r["false"] or late:
            told = "told" if r["expected_h"] else "not told"
            out.append(
                f"{'FALSE' if r['false'] else 'LATE '} {r['index']} {r['kind']} end {r['end_h']:.0f}"
                f" min {r['min_h']:.1f} offset {r['offset_h']} {told} n {r['scans']}"
            )
            out += ["       " + " ".join(map(str, stage)) for stage in r["stages"]]
    return "\n".join(out)


def main() -> int:
    ask = argparse.ArgumentParser(description=__doc__)
    ask.add_argument("--rigs", type=int, default=300)
    ask.add_argument("--first", type=int, default=0)
    ask.add_argument("--seed", type=int, default=1)
    ask.add_argument("--workers", type=int, default=1)
    ask.add_argument(
        "--levels", action="store_true", help="try other levels of evidence too (a third slower)"
    )
    ask.add_argument("--list", action="store_true", help="list false, missed and late rigs")
    ask.add_argument("--out", type=Path, help="write all rows as JSON lines")
    told = ask.parse_args()
    jobs = [(told.seed, i) for i in range(told.first, told.first + told.rigs)]
    work = run_levels if told.levels else run_one
    if told.workers > 1:
        with ProcessPoolExecutor(told.workers) as pool:
            rows = list(pool.map(work, jobs, chunksize=4))
    else:
        rows = [work(j) for j in jobs]
    if told.out:
        told.out.write_text("".join(json.dumps(r, default=float) + "\n" for r in rows))
    if told.list:
        print(listed(rows))
    print("\n".join(lines(table.figures(rows), score.UNIT_SHARE if told.levels else None)))
    scans, cpu = sum(r["scans"] for r in rows), sum(r["cpu_s"] for r in rows)
    print(f"{1e6 * cpu / scans:.1f} us a scan, {cpu / len(rows):.2f} s a rig")
    return 0


if __name__ == "__main__":
    sys.exit(main())
