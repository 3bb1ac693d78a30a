"""Steps: what cleaning takes for a slip on simulated rigs, against what did slip.

    python tests/bench/detection/steps.py --rigs 100 --seed 601 [--kind jerky] [--list]

Each rig is simulated twice, with and without its slips, re-zeros and stuck readings, all else equal to the
last digit: the difference is the truth. Prints, by the size of the slip in units of the noise of one scan of
one side, how many were found within three scans of their place and with what error; the steps that were
none, per rig and per 1000 h, by what else went on there; and how far the cleaned mean strain is off the one
of the rig without events, in units of the noise of one scan, in the end and in stuck stretches.
"""

from __future__ import annotations

import argparse
import itertools
import sys
from collections import Counter
from dataclasses import dataclass, field, replace

import numpy as np
from campaign import block_of, rules_of

from daq.core import clean, intake, ladder
from daq.core.block import Block
from daq.core.rules import TestRules
from simulator import population
from simulator.rig import Run, simulate

CLASSES = (0.0, 2.0, 4.0, 6.0, 10.0, 20.0, np.inf)
NEAR_SCANS = 3
MOVERS = ("slip", "rezero")
"""Events that shift the level of a side for good."""
HEATERS = ("excursion", "furnace_step")


@dataclass
class Rig:
    """What one rig showed. ``slips``: (size in noises, found, error in noises of the mean)."""

    index: int
    kind: str
    hours: float
    slips: list[tuple[float, bool, float]] = field(default_factory=list)
    false: list[tuple[str, float, float, str]] = field(default_factory=list)
    given_back: int = 0
    end_error: float = float("nan")
    removed_share: float = 0.0
    stuck_errors: list[float] = field(default_factory=list)


def cleaned(block: Block, rules: TestRules) -> tuple[list[intake.Step], np.ndarray, intake.IntakeState]:
    """Return the steps, the leaves one by one, unmerged, and the last state, as the follower makes them."""
    s = intake.IntakeState()
    rows = intake.rows_of(block, 0.0)
    clock = np.maximum.accumulate(rows[:, intake.T_S])
    rungs: list[np.ndarray] = []
    steps: list[intake.Step] = []
    at = 0
    while at < rows.shape[0]:
        s, at, leaf = intake.next_leaf(s, rules, rows, clock, at, False)
        if leaf is None:
            s, at, leaf = intake.next_leaf(s, rules, rows, clock, at, True)
        assert leaf is not None
        if leaf.step is not None:
            steps.append(leaf.step)
        if leaf.rung is not None:
            rungs.append(leaf.rung)
        if len(s.jerks) >= clean.JERKS:
            s, whole = intake.give_back(s, np.concatenate(rungs))
            rungs = [whole]
    return steps, np.concatenate(rungs), s


def without_events(run: Run) -> Run:
    """Return the same rig without what moves or holds a reading."""
    kept = tuple(e for e in run.spec.events if e.kind not in (*MOVERS, "stuck"))
    return simulate(replace(run.spec, events=kept))


def judge_rig(seed: int, index: int, run: Run) -> Rig:
    """Clean one rig and compare."""
    rules = rules_of(run)
    block, plain = block_of(run, rules), block_of(without_events(run), rules)
    n = len(block)
    if run.truth.rupture_h is not None:
        n = int(np.searchsorted(block.t_s, run.truth.rupture_h * 3600.0, side="right"))
    block, plain = block.cut(0, n), plain.cut(0, n)
    steps, rungs, last = cleaned(block, rules)
    _, rungs0, _ = cleaned(plain, rules)
    t_h = block.t_s / 3600.0
    one = run.spec.transducers[0]
    noise = float(np.hypot(one.white, one.count / 12.0**0.5))
    mean_noise = noise / len(run.spec.transducers) ** 0.5
    out = Rig(index, run.truth.kind, float(t_h[-1]))
    moved = [block.strain_a - plain.strain_a, block.strain_b - plain.strain_b]
    open_steps = list(steps)
    for e in run.spec.events:
        first = int(np.searchsorted(run.columns["time_s"] / 3600.0, e.at_h))
        if e.kind not in MOVERS or not 0 < first < n:
            continue
        jumps = [float(m[first] - m[first - 1]) for m in moved]
        there = [j for j in jumps if np.isfinite(j)]
        if not there:
            continue
        near = [s for s in open_steps if abs(np.searchsorted(t_h, s.time_h - 1e-9) - first) <= NEAR_SCANS]
        true = sum(there) / len(there)
        error = float("nan")
        if near:
            open_steps.remove(near[0])
            error = (near[0].size - true) / mean_noise
        out.slips.append((max(abs(j) for j in there) / noise, bool(near), error))
    out.given_back = sum(1 for _ in steps) if last.jerky else 0
    for s in open_steps:
        out.false.append((around(run, s.time_h), s.time_h, s.size / mean_noise, ",".join(s.sides)))
    level = np.interp(rungs[:, ladder.T], rungs0[:, ladder.T], rungs0[:, ladder.E])
    off = rungs[:, ladder.E] - level
    out.end_error = float(np.median(off[-5:]) - np.median(off[:5])) / mean_noise
    shifts = [float(m[-1]) for m in moved if np.isfinite(m[-1])]
    true_steps = sum(shifts) / len(shifts) if shifts else 0.0
    sides = [o for o, m in zip(last.offsets, moved, strict=True) if np.isfinite(m).any()]
    out.removed_share = (sum(sides) / len(sides) - true_steps) / float(run.truth.strain[-1])
    for e in run.spec.events:
        if e.kind == "stuck":
            during = (rungs[:, ladder.T] >= e.at_h) & (rungs[:, ladder.T] < e.at_h + e.hours)
            before = rungs[:, ladder.T] < e.at_h
            if during.any() and before.any():
                out.stuck_errors.append(float(np.max(np.abs(off[during] - off[before][-1])) / mean_noise))
    return out


def around(run: Run, at_h: float) -> str:
    """Say what else went on at ``at_h``."""
    for e in run.spec.events:
        wide = e.hours if e.kind != "furnace_step" else 1.5
        if e.kind in (*HEATERS, "stuck", "burst", "gap", "lost") and (
            e.at_h - 0.02 * at_h - 0.1 <= at_h <= e.at_h + wide + 0.02 * at_h + 0.1
        ):
            return e.kind
    return "jerky" if "jerk" in run.truth.kind else "nothing"


def table(rigs: list[Rig]) -> str:
    """Return the table as text."""
    hours = sum(r.hours for r in rigs)
    slips = [s for r in rigs for s in r.slips]
    lines = [f"rigs {len(rigs)}, {hours:.0f} h, slips {len(slips)}, found {sum(s[1] for s in slips)}"]
    for low, high in itertools.pairwise(CLASSES):
        some = [s for s in slips if low <= s[0] < high]
        errors = np.array([s[2] for s in some if s[1]])
        said = f"rms error {np.sqrt(np.mean(errors**2)):.2f} noises of the mean" if errors.size else ""
        lines.append(f"  slips of {low:g} to {high:g} noises: {len(some):3d}, found {errors.size:3d}  {said}")
    false = [f for r in rigs for f in r.false]
    lines.append(
        f"false steps {len(false)} in {sum(bool(r.false) for r in rigs)} rigs: "
        f"{len(false) / len(rigs):.3f} a rig, "
        f"{1e3 * len(false) / hours:.4f} per 1000 h; by surroundings {dict(Counter(f[0] for f in false))}"
    )
    ends = np.abs([r.end_error for r in rigs if np.isfinite(r.end_error)])
    lines.append(
        f"cleaned strain off in the end [noises of the mean]: median {np.median(ends):.2f}, "
        f"90th percentile {np.quantile(ends, 0.9):.2f}, worst {np.max(ends):.1f}"
    )
    stuck = [x for r in rigs for x in r.stuck_errors]
    if stuck:
        lines.append(
            f"worst in stuck stretches ({len(stuck)}): median {np.median(stuck):.2f}, "
            f"90th percentile {np.quantile(stuck, 0.9):.2f}, worst {np.max(stuck):.1f}"
        )
    shares = [100.0 * r.removed_share for r in rigs]
    lines.append(
        f"true strain taken out for steps [% of the last]: mean {np.mean(shares):.3f}, "
        f"worst {max(shares, key=abs):.2f}"
    )
    return "\n".join(lines)


def main() -> int:
    ask = argparse.ArgumentParser(description=__doc__)
    ask.add_argument("--rigs", type=int, default=100)
    ask.add_argument("--first", type=int, default=0)
    ask.add_argument("--seed", type=int, default=601)
    ask.add_argument("--kind", default="", help="only rigs whose curve is of this kind")
    ask.add_argument("--event", default="", help="only rigs with an event of this kind")
    ask.add_argument("--list", action="store_true", help="list every step that is none, every missed slip")
    told = ask.parse_args()
    rigs: list[Rig] = []
    index = told.first
    while len(rigs) < told.rigs:
        spec = population.draw(told.seed, index)
        if told.kind in spec.kind and (not told.event or any(e.kind == told.event for e in spec.events)):
            rigs.append(judge_rig(told.seed, index, simulate(spec)))
        index += 1
    if told.list:
        for r in rigs:
            for place, at_h, size, sides in r.false:
                print(
                    f"false  {r.index} {r.kind} {at_h:.1f} of {r.hours:.0f} h, {size:+.1f} {sides}: {place}"
                )
            for size, found, _ in r.slips:
                if not found:
                    print(f"missed {r.index} {r.kind} {size:.1f}")
            if abs(r.removed_share) > 0.01:
                print(f"taken  {r.index} {r.kind} {100 * r.removed_share:+.1f} %, off {r.end_error:+.1f}")
            for error in r.stuck_errors:
                print(f"stuck  {r.index} {r.kind} {error:.1f}")
    print(table(rigs))
    return 0


if __name__ == "__main__":
    sys.exit(main())
