"""How good are the forecasts? Rigs that rupture, run through the whole chain and held against the truth.

    python tests/bench/forecast.py --rigs 100 --seed 1

At half, three quarters and nine tenths of the tertiary stage (least rate to rupture) the forecast of rupture
then in force is taken: how many rigs have one, the median error of the time left, how many of the 90 %
intervals hold the truth; and why the others have none. Strain milestones are asked for at half and four
fifths of the time of test at which they come. The same seed gives the same table.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Iterable, Iterator, Mapping
from concurrent.futures import ProcessPoolExecutor
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "core"))

from rig_facts import facts_of

from daq.core import chain
from daq.records import Finding, RulesAdopted
from simulator import population
from simulator.rig import Run, simulate

SHARES = (0.5, 0.75, 0.9)
MILESTONE_SHARES = (0.5, 0.8)
Row = dict[str, Any]


def ruptured(seed: int) -> Iterator[tuple[int, Run]]:
    """Yield the rigs of a population that turn tertiary and rupture, with their runs."""
    index = 0
    while True:
        spec = population.draw(seed, index)
        if spec.rupture_h is not None:
            run = simulate(spec)
            if run.truth.rupture_h is not None and run.truth.turns_tertiary:
                yield index, run
        index += 1


def replay(run: Run) -> list[Finding]:
    """Return all findings of a run, fed in blocks as a replay would."""
    facts = facts_of(run, cuts=range(4096, 1_000_000, 4096))
    assert isinstance(facts[0], RulesAdopted)
    state, out = chain.begin(facts[0]), []
    for fact in facts[1:]:
        state, found = chain.step(state, fact)
        out += found
    return out


def judge(index: int, seed: int) -> Row:
    """Run one rig; return what was foretold when, beside the truth."""
    run = simulate(population.draw(seed, index))
    truth, findings = run.truth, [f for f in replay(run) if f.kind == "forecast"]
    assert truth.rupture_h is not None
    row: Row = {"kind": truth.kind, "rupture": {}, "milestones": []}
    stage_h = truth.rupture_h - truth.minimum_h
    for share in SHARES:
        at_h = truth.minimum_h + share * stage_h
        row["rupture"][share] = _held(in_force(findings, "rupture", at_h), at_h, truth.rupture_h)
    zero = sum(t.zero for t in run.spec.transducers) / len(run.spec.transducers)
    seen = truth.strain + run.spec.loading_strain + zero
    for of in {f.fields["of"] for f in findings if f.fields["of"].startswith("strain_")}:
        level = float(of.removeprefix("strain_").removesuffix("_percent").replace("p", ".")) / 100.0
        if not seen[0] < level < seen[-1]:
            continue
        due_h = float(truth.t_h[int(np.argmax(seen >= level))])
        for share in MILESTONE_SHARES:
            found = in_force(findings, of, share * due_h)
            row["milestones"].append((share, *_held(found, share * due_h, due_h)))
    return row


def in_force(findings: Iterable[Finding], of: str, at_h: float) -> Mapping[str, Any] | None:
    """Return the last word on an event at that time, None where nothing was said."""
    last = None
    for f in findings:
        if f.fields["of"] == of and f.test_h is not None and f.test_h <= at_h:
            last = f.fields
    return last


def _held(fields: Mapping[str, Any] | None, at_h: float, true_h: float) -> tuple[float | None, bool, str]:
    """Return the signed error of the time left, whether the interval holds it, or why there is none."""
    if fields is None:
        return None, False, "nothing said yet"
    if "none_because" in fields:
        return None, False, str(fields["none_because"]).partition(" between ")[0]
    error = (fields["median_h"] - true_h) / (true_h - at_h)
    return error, fields["low_h"] <= true_h <= fields["high_h"], ""


def line(name: str, held: list[tuple[float | None, bool, str]]) -> str:
    """Return one line of the table."""
    told = [h for h in held if h[0] is not None]
    if not told:
        return f"{name:34s} {len(told):4d} of {len(held):4d} told"
    errors = np.array([h[0] for h in told], float)
    inside = np.array([h[1] for h in told])
    return (
        f"{name:34s} {len(told):4d} of {len(held):4d} told"
        f"   error of time left {np.median(np.abs(errors)):6.1%}   bias {np.median(errors):+6.1%}"
        f"   interval holds {inside.mean():6.1%}"
    )


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--rigs", type=int, default=100, help="rigs that rupture (default 100)")
    parser.add_argument("--seed", type=int, default=1, help="seed of the population (default 1)")
    parser.add_argument("--workers", type=int, default=1, help="processes (default 1)")
    args = parser.parse_args()
    rigs = ruptured(args.seed)
    indices = [next(rigs)[0] for _ in range(args.rigs)]
    work = partial(judge, seed=args.seed)
    if args.workers > 1:
        with ProcessPoolExecutor(args.workers) as pool:
            rows = list(pool.map(work, indices, chunksize=4))
    else:
        rows = [work(index) for index in indices]
    print(f"{args.rigs} rigs, seed {args.seed}; 90 % intervals")
    for share in SHARES:
        print(line(f"rupture at {share:g} of tertiary", [r["rupture"][share] for r in rows]))
    for kind in sorted({r["kind"] for r in rows}):
        print(line(f"  {kind} at 0.75", [r["rupture"][0.75] for r in rows if r["kind"] == kind]))
    for share in MILESTONE_SHARES:
        held = [m[1:] for r in rows for m in r["milestones"] if m[0] == share]
        print(line(f"milestones at {share:g} of their time", held))
    why = Counter(r["rupture"][0.75][2] for r in rows if r["rupture"][0.75][0] is None)
    for reason, count in why.most_common():
        print(f"  none at 0.75: {count:4d} {reason}")


if __name__ == "__main__":
    main()
