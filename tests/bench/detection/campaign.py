"""Campaign: the detector on simulated rigs, against the truth and the best possible delay.

    python tests/bench/detection/campaign.py --rigs 300 --seed 1 [--workers 2] [--list]

Prints false detections with their exact (Clopper & Pearson 1934) interval, misses, delay over the best
possible one, detections after the 0.2 % offset, error of the least rate over the best possible standard
error, and how often its 90 % interval holds the truth. Same seed, same table, on any number of workers.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path
from typing import Any

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")  # small matrices: threads only get in each other's way

import numpy as np  # noqa: E402

from daq.core import follow, limit  # noqa: E402
from daq.core.block import Block  # noqa: E402
from daq.core.rules import ChannelRules, Loading, Role, Specimen, TestRules  # noqa: E402
from simulator import population  # noqa: E402
from simulator.rig import Run, simulate  # noqa: E402

CHUNK = 4000


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


def block_of(run: Run, rules: TestRules) -> Block:
    """Return the whole run as one block of converted scans."""
    c = run.columns
    n = c["time_s"].size
    none = np.full(n, np.nan)
    sides = {ch.side or "A": c[ch.name] for ch in rules.channels if ch.role is Role.STRAIN}
    couples = [c[ch.name] for ch in rules.channels if ch.role is Role.SPECIMEN_TEMPERATURE]
    values = np.zeros((n, 0))
    return Block(
        0,
        np.round(c["time_s"] * 1e4).astype(np.int64),
        c["time_s"] - c["time_s"][0],
        values,
        values.astype(np.uint8),
        sides.get("A", none),
        sides.get("B", none),
        np.mean(couples, axis=0) if couples else none,
        c.get("room", none),
        c.get("output", none),
    )


def run_one(job: tuple[int, int]) -> dict[str, Any]:
    """Run one rig and return what is needed for the table."""
    seed, index = job
    run = simulate(population.draw(seed, index))
    rules = rules_of(run)
    block = block_of(run, rules)
    truth = run.truth
    n = len(block)
    if truth.rupture_h is not None:
        n = int(np.searchsorted(block.t_s, truth.rupture_h * 3600.0, side="right"))
    began = time.process_time()
    s = follow.begin(rules)
    said: list[Any] = []
    for lo in range(0, n, CHUNK):
        s, some = follow.follow(s, rules, block.cut(lo, min(n, lo + CHUNK)))
        said += some
    cue = "ended" if truth.rupture_h is None else "ruptured"
    s, some = follow.tell(s, rules, cue, int(block.tick[n - 1]), float(block.t_s[n - 1]), n - 1)
    said += some
    spent = time.process_time() - began
    hours = {c: float(block.t_s[c]) / 3600.0 for c in {x.scan for x in said}}
    out: dict[str, Any] = {
        "index": index,
        "kind": truth.kind,
        "rises": truth.rises,
        "turns": truth.turns_tertiary,
        "min_h": truth.minimum_h,
        "first_h": truth.first_rise_h,
        "end_h": truth.end_h,
        "offset_h": truth.offset_0p2_h,
        "rise5_h": truth.rise_5_percent_h,
        "min_rate": truth.minimum_rate_per_h,
        "ruptured": truth.rupture_h is not None,
        "seen_h": float(
            block.t_s[:n][np.isfinite(block.strain_a[:n]) | np.isfinite(block.strain_b[:n])].max()
        )
        / 3600,
        "scans": n,
        "cpu_s": spent,
        "expected_h": rules.expected_rupture_h,
        "noise": [truth.noise.white, *truth.noise.drifts],
        "events": [(e.kind, round(e.at_h, 2), e.size) for e in truth.events],
        "stages": [
            (x.fields["stage"], round(hours[x.scan], 3), x.fields["onset_h"], x.fields["why"])
            for x in said
            if x.kind == "stage"
        ],
        "steps": [
            (x.fields["time_h"], x.fields["size"], x.fields["channels"]) for x in said if x.kind == "step"
        ],
        "onsets": {x.key: x.fields["time_h"] for x in said if x.kind == "onset"},
    }
    detected = [hours[x.scan] for x in said if x.kind == "stage" and x.key == "tertiary"]
    out["detected_h"] = detected
    least = [x.fields for x in said if x.kind == "minimum_rate"]
    out["least"] = least[-1] if least else None
    out["limit_h"] = limit_of(run) if truth.rises else None
    start = truth.first_rise_h if truth.first_rise_h is not None else truth.minimum_h
    out["false"] = bool([d for d in detected if not truth.rises or d < start])
    true = [d for d in detected if truth.rises and d >= start]
    out["true_h"] = true[0] if true else None
    return out


def limit_of(run: Run) -> float | None:
    """Return the best possible detection time [h], None where the record is too short for any."""
    truth = run.truth
    t_s = np.sort(run.columns["time_s"])
    t_s = t_s[t_s <= truth.end_h * 3600.0]
    equivalent_s = np.maximum.accumulate(np.interp(t_s / 3600.0, truth.t_h, truth.equivalent_h)) * 3600.0
    strain = run.spec.creep.envelope.strain(equivalent_s / 3600.0)
    noise = limit.Noise(
        truth.noise.white,
        truth.noise.count,
        tuple((sd, memory * 3600.0) for sd, memory in truth.noise.drifts),
    )
    at = limit.detectable_at(equivalent_s, strain, noise, limit.level_for(1.0 / 200.0))
    return None if at is None else float(np.interp(at / 3600.0, truth.equivalent_h, truth.t_h))


def clopper_pearson(k: int, n: int, level: float = 0.95) -> tuple[float, float]:
    """Return the exact binomial interval of k in n."""
    from scipy.stats import beta

    a = (1.0 - level) / 2.0
    low = 0.0 if k == 0 else float(beta.ppf(a, k, n - k + 1))
    high = 1.0 if k == n else float(beta.ppf(1.0 - a, k + 1, n - k))
    return low, high


def table(rows: list[dict[str, Any]]) -> str:
    """Return the table as text."""
    n = len(rows)
    false = sum(r["false"] for r in rows)
    lo, hi = clopper_pearson(false, n)
    # a record whose extensometer was taken off before the 0.2 % offset cannot miss what it does not show
    turning = [
        r for r in rows if r["turns"] and r["ruptured"] and r["seen_h"] > (r["offset_h"] or r["end_h"])
    ]
    missed = [r for r in turning if r["true_h"] is None]
    late = [r for r in turning if r["true_h"] is not None and r["offset_h"] and r["true_h"] > r["offset_h"]]
    lines = [
        f"rigs {n}: false {false} = {100 * false / n:.2f} % (95 % exact {100 * lo:.2f}..{100 * hi:.2f})",
        f"turning and ruptured {len(turning)}: missed {len(missed)}, after the 0.2 % offset {len(late)}",
    ]
    share = [
        (r["true_h"] - r["min_h"]) / (r["offset_h"] - r["min_h"])
        for r in turning
        if r["true_h"] is not None and r["offset_h"]
    ]
    if share:
        lines.append(
            f"detection between least rate (0) and 0.2 % offset (1): median {np.median(share):.2f}, "
            f"90th percentile {np.quantile(share, 0.9):.2f}"
        )
    ratios = []
    for r in rows:
        if r["turns"] and r["limit_h"] is not None and r["seen_h"] > r["limit_h"]:
            start = r["first_h"] if r["first_h"] is not None else r["min_h"]
            if r["true_h"] is not None and r["limit_h"] > start:
                ratios.append((r["true_h"] - start) / (r["limit_h"] - start))
            elif r["true_h"] is None:
                ratios.append(float("inf"))
    if ratios:
        lines.append(
            f"delay over the best possible ({len(ratios)} rigs): median {np.median(ratios):.2f}, "
            f"90th percentile {np.quantile(ratios, 0.9, method='higher'):.2f}"
        )
    errors, held = [], []
    for r in rows:
        if r["turns"] and r["least"] is not None and r["true_h"] is not None:
            least = r["least"]
            known = least["corrected_rate_per_h"] or least["rate_per_h"]  # the truth is at the set point
            share = known / least["rate_per_h"]
            errors.append(abs(known / r["min_rate"] - 1.0))
            held.append(least["low_per_h"] * share <= r["min_rate"] <= least["high_per_h"] * share)
    if errors:
        lines.append(
            f"least rate: median error {100 * np.median(errors):.2f} %, "
            f"90 % interval holds {100 * np.mean(held):.1f} %"
        )
    scans, cpu = sum(r["scans"] for r in rows), sum(r["cpu_s"] for r in rows)
    lines.append(f"{1e6 * cpu / scans:.1f} us a scan, {cpu / n:.2f} s a rig")
    return "\n".join(lines)


def main() -> int:
    ask = argparse.ArgumentParser(description=__doc__)
    ask.add_argument("--rigs", type=int, default=300)
    ask.add_argument("--first", type=int, default=0)
    ask.add_argument("--seed", type=int, default=1)
    ask.add_argument("--workers", type=int, default=1)
    ask.add_argument("--list", action="store_true", help="list false, missed and late rigs")
    ask.add_argument("--out", type=Path, help="write all rows as JSON lines")
    told = ask.parse_args()
    jobs = [(told.seed, i) for i in range(told.first, told.first + told.rigs)]
    if told.workers > 1:
        with ProcessPoolExecutor(told.workers) as pool:
            rows = list(pool.map(run_one, jobs, chunksize=4))
    else:
        rows = [run_one(j) for j in jobs]
    if told.out:
        told.out.write_text("".join(json.dumps(r, default=float) + "\n" for r in rows))
    if told.list:
        for r in rows:
            late = (
                r["turns"]
                and r["ruptured"]
                and r["seen_h"] > (r["offset_h"] or r["end_h"])
                and (r["true_h"] is None or r["true_h"] > (r["offset_h"] or 1e99))
            )
            if r["false"] or late:
                print(
                    "FALSE" if r["false"] else "LATE ",
                    r["index"],
                    r["kind"],
                    f"end {r['end_h']:.0f} min {r['min_h']:.1f}",
                    f"offset {r['offset_h']}",
                    "told" if r["expected_h"] else "not told",
                    f"n {r['scans']}",
                )
                for stage in r["stages"]:
                    print("      ", *stage)
    print(table(rows))
    return 0


if __name__ == "__main__":
    sys.exit(main())
