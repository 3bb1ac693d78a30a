"""The standing comparison: this detector and others on one seeded set of simulated rigs, in one table.

    python tests/bench/detection/compare.py --seed 2024 --rigs-ours 2000 --rigs-others 400 --out DIR

The others are tuned on rigs of another seed (``--tuning-seed``, ``--rigs-tuning``) and scored on these: of
all settings of a detector with false detections on at most one rig in 200 of the tuning rigs (and, in the
second part of the table, one in twenty), those whose misses are within 2 % of the fewest possible, and of
these the one with the least median delay. What they are given: see ``others.py``. river and ruptures come
with ``pip install '.[refs]'``; without one its detectors are left out with a notice.

Answers are kept in DIR as JSON lines and a run that was stopped goes on where it was, unless the program has
changed since; ``--ours`` takes rows that campaign.py wrote with --out, whatever wrote them. Same seeds, same
table, on any number of workers.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import os
import sys
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")  # small matrices: threads only get in each other's way
sys.path.insert(0, str(Path(__file__).resolve().parent))

import numpy as np  # noqa: E402
import others  # noqa: E402
from campaign import clopper_pearson, limit_of, run_one  # noqa: E402
from others import Array, Flags  # noqa: E402

STRICT, LOOSE = 1.0 / 200.0, 1.0 / 20.0
PARTS = (
    (STRICT, "1 false in 200, helped", ("helped", "corrected")),
    (LOOSE, "1 false in 20, helped", ("helped", "corrected")),
    (STRICT, "1 false in 200, as recorded", ("as recorded",)),
)
"""Parts of the table: share of false detections to tune to, its name, inputs to choose from."""
BY_HAND = ("slope, ratio alone (by hand)", "slope over the last stretch", "margin", 0.0)
"""A line of its own for the settings of a detector that have one value: the rule as people use it."""
MISSES_WITHIN = 0.02
USEFUL = 0.5
"""Share of turning rigs that a detector must find to be of any use."""
Row = dict[str, Any]
ROOT = Path(__file__).resolve().parents[3]


def others_one(job: tuple[int, int]) -> Row:
    """Return the truth of one rig and the first alarms of every other detector at every setting."""
    seed, index = job
    run, alarms = others.first_alarms(seed, index)
    truth = run.truth
    strain = np.array([run.columns[c.name] for c in run.spec.transducers])
    time_h = run.columns["time_s"] / 3600.0
    seen = np.isfinite(strain).any(axis=0) & (time_h <= truth.end_h)
    return {
        "index": index,
        "kind": truth.kind,
        "rises": truth.rises,
        "turns": truth.turns_tertiary,
        "ruptured": truth.rupture_h is not None,
        "min_h": truth.minimum_h,
        "first_h": truth.first_rise_h,
        "end_h": truth.end_h,
        "offset_h": truth.offset_0p2_h,
        "seen_h": float(time_h[seen].max()),
        "limit_h": limit_of(run) if truth.rises else None,
        "alarms": alarms,
    }


def kept(
    path: Path, stamp: str, jobs: list[tuple[int, int]], do: Callable[[Any], Row], workers: int
) -> list[Row]:
    """Return the rows of ``jobs``, those in ``path`` read back, the rest worked out and added to it.

    A file whose first line is not ``stamp`` is begun anew; a last line that was cut short is left out.
    """
    rows: dict[int, Row] = {}
    lines = path.read_text(encoding="utf-8").splitlines() if path.exists() else []
    good = [line for line in lines[1:] if line.endswith("}")] if lines[:1] == [stamp] else []
    for line in good:
        row = _compact(json.loads(line))
        rows[row["index"]] = row
    if len(good) + 1 != len(lines):
        path.write_text("\n".join([stamp, *good]) + "\n", encoding="utf-8")
    todo = [j for j in jobs if j[1] not in rows]
    with path.open("a", encoding="utf-8") as file:
        for done, row in enumerate(_spread(do, todo, workers), 1):
            file.write(json.dumps(row, default=float, separators=(",", ":")) + "\n")
            file.flush()
            rows[row["index"]] = _compact(row)
            if sys.stderr.isatty() or done % 50 == 0 or done == len(todo):
                print(f"\r{path.name}: {done} of {len(todo)}", end="", file=sys.stderr, flush=True)
    if todo:
        print(file=sys.stderr)
    return [rows[i] for _, i in jobs]


def _compact(row: Row) -> Row:
    """Return the row with its alarms, some ten thousand numbers, as arrays; None becomes NaN."""
    if "alarms" in row:
        row["alarms"] = {m: np.array(hours, dtype=np.float64) for m, hours in row["alarms"].items()}
    return row


def _spread(do: Callable[[Any], Row], todo: list[tuple[int, int]], workers: int) -> Iterator[Row]:
    if workers <= 1:
        yield from map(do, todo)
        return
    with ProcessPoolExecutor(workers) as pool:
        yield from pool.map(do, todo, chunksize=4)


def sources(*places: str) -> str:
    """Return a few digits that change with any source line of these modules and folders of the project.

    Answers are kept beside it, so that those of an earlier version of the program are never taken for new.
    """
    digest = hashlib.sha256()
    for place in places:
        path = ROOT / place
        for file in sorted(path.rglob("*.py")) if path.is_dir() else [path]:
            digest.update(file.read_bytes())
    return digest.hexdigest()[:12]


class Truths:
    """The truth of a set of rigs as arrays; NaN where something is not so."""

    def __init__(self, rows: list[Row]) -> None:
        def hours(name: str) -> Array:
            return np.array([np.nan if r[name] is None else r[name] for r in rows], dtype=np.float64)

        self.rises = np.array([r["rises"] for r in rows])
        turns = np.array([r["turns"] for r in rows])
        first, limit, seen = hours("first_h"), hours("limit_h"), hours("seen_h")
        self.offset = hours("offset_h")
        self.start = np.where(np.isnan(first), hours("min_h"), first)
        end = np.where(np.isnan(self.offset), hours("end_h"), self.offset)
        # a record whose extensometer was taken off before the 0.2 % offset cannot miss what it does not show
        self.turning = turns & np.array([r["ruptured"] for r in rows]) & (seen > end)
        self.measured = turns & (seen > limit) & (limit > self.start)
        self.span = np.where(self.measured, limit - self.start, np.nan)


@dataclass(frozen=True)
class Score:
    """What the table says of one detector at one setting, or arrays of it over settings."""

    rigs: int
    turning: int
    false: Any
    missed: Any
    late: Any
    median: Any
    ninetieth: Any

    def at(self, i: int) -> Score:
        """Return the score of setting ``i``."""
        return Score(
            self.rigs,
            self.turning,
            *(np.asarray(x)[i] for x in (self.false, self.missed, self.late, self.median, self.ninetieth)),
        )


def score(truths: Truths, false: Flags, true_h: Array) -> Score:
    """Score detectors or settings: ``false`` and ``true_h`` (NaN: none) have shape (rigs, settings).

    One rule for all: a rig with a false detection counts as false and is left out of misses and delays. The
    delay of a rig that turns and is never found is infinite.
    """
    turning = truths.turning[:, None] & ~false
    none = np.isnan(true_h)
    delay = (true_h - truths.start[:, None]) / truths.span[:, None]
    delay = np.where(none, np.inf, delay)
    delay = np.where(truths.measured[:, None] & ~false, delay, np.nan)
    ordered = np.sort(delay, axis=0)  # NaN last
    counts = np.sum(~np.isnan(delay), axis=0)
    some = counts > 0

    def quantile(q: float) -> Array:
        # always one of the delays, as in daq.prove: no mean of a finite one and an infinite one
        at = np.maximum(np.ceil(q * counts).astype(int) - 1, 0)
        return np.where(some, ordered[at, np.arange(ordered.shape[1])], np.nan)

    with np.errstate(invalid="ignore"):
        late = turning & ~none & (true_h > truths.offset[:, None])
    return Score(
        len(truths.start),
        int(truths.turning.sum()),
        false.sum(axis=0),
        (turning & none).sum(axis=0),
        late.sum(axis=0),
        quantile(0.5),
        quantile(0.9),
    )


def judged(truths: Truths, alarm_h: Array) -> Score:
    """Score first alarms, shape (rigs, settings), NaN where there is none."""
    with np.errstate(invalid="ignore"):
        early = ~truths.rises[:, None] | (alarm_h < truths.start[:, None])
    false = ~np.isnan(alarm_h) & early
    return score(truths, false, np.where(false, np.nan, alarm_h))


def ours(rows: list[Row]) -> Score:
    """Score this detector's rows; withdrawn detections count."""
    false = np.array([[r["false"]] for r in rows])
    true_h = np.array([[np.nan if r["true_h"] is None else r["true_h"]] for r in rows])
    return score(Truths(rows), false, true_h).at(0)


def alarms_of(rows: list[Row], method: str) -> Array:
    """Return the first alarms of a detector, shape (rigs, settings)."""
    return np.array([r["alarms"][method] for r in rows], dtype=np.float64)


def best_setting(tuning: Score, share: float, wanted: Flags) -> int | None:
    """Return the best ``wanted`` setting with at most ``share`` of the tuning rigs false, or None."""
    allowed = np.flatnonzero((tuning.false <= share * tuning.rigs) & wanted)
    if not allowed.size:
        return None
    few = tuning.missed[allowed].min() + MISSES_WITHIN * tuning.turning
    allowed = allowed[tuning.missed[allowed] <= few]
    order = np.lexsort((tuning.ninetieth[allowed], tuning.median[allowed]))
    return int(allowed[order[0]])


HEAD = (
    f"{'detector':34} {'rigs':>5} {'false':>6} {'95 % exact':>14} {'missed':>12} {'after 0.2 %':>12} "
    f"{'delay/best':>11} {'90th':>6}"
)


def line(name: str, s: Score) -> str:
    """Return one line of the table."""
    low, high = clopper_pearson(int(s.false), s.rigs)

    def number(x: float) -> str:
        return "-" if np.isnan(x) else "never" if np.isinf(x) else f"{x:.2f}"

    return (
        f"{name:34} {s.rigs:5d} {100 * s.false / s.rigs:5.2f}% {100 * low:6.2f}..{100 * high:5.2f}% "
        f"{s.missed:5d} of {s.turning:3d} {s.late:12d} {number(s.median):>11} {number(s.ninetieth):>6}"
    )


def table(our_rows: list[Row], tuning_rows: list[Row], rows: list[Row]) -> str:
    """Return the whole table as text."""
    out = [HEAD, "-" * len(HEAD)]
    if our_rows:
        out.append(line("this detector", ours(our_rows)))
        known = {r["index"] for r in rows}
        same = [r for r in our_rows if r["index"] in known]
        if 0 < len(same) < len(our_rows):
            out.append(line("  of these, the rigs of the others", ours(same)))
    notes: list[str] = []
    tuned, truths = Truths(tuning_rows), Truths(rows)
    methods = [m for m in others.SETTINGS if rows and m in rows[0]["alarms"]]
    trained = {m: judged(tuned, alarms_of(tuning_rows, m)) for m in methods}
    answers = {m: judged(truths, alarms_of(rows, m)) for m in methods}
    for share, words, inputs in PARTS:
        out.append(f"tuned to {words} on {len(tuning_rows)} other rigs:")
        for title, m, only in [(BY_HAND[0], BY_HAND[1], BY_HAND[2:]), *((m, m, None) for m in methods)]:
            name = "  " + title + (" *" if m in others.HINDSIGHT else "")
            wanted = np.array(
                [x["input"] in inputs and (only is None or x[only[0]] == only[1]) for x in others.SETTINGS[m]]
            )
            i = best_setting(trained[m], share, wanted)
            if i is None:
                least = int(trained[m].false[wanted].min())
                out.append(f"{name:34} no setting; the least is {least} false of {len(tuning_rows)}")
                continue
            got = answers[m].at(i)
            out.append(line(name, got))
            t = trained[m].at(i)
            useful = t.missed + t.false <= (1.0 - USEFUL) * t.turning
            told = ", ".join(f"{k} {_plain(v)}" for k, v in others.SETTINGS[m][i].items())
            notes.append(
                f"{title}, {words}: {told}; on the tuning rigs {t.false} false, {t.missed} missed, "
                f"delay {t.median:.2f} / {t.ninetieth:.2f}"
                + ("" if useful else f"; misses more than {100 * (1 - USEFUL):.0f} %: of no use there")
            )
    out += ["", NOTES]
    for library in sorted(set(others.NEEDS.values())):
        gone = [m for m, need in others.NEEDS.items() if need == library and m not in methods]
        if gone:
            out.append(f"{library} is not installed, left out: {', '.join(gone)}.")
    return "\n".join([*out, "", "Settings:", *notes])


NOTES = """\
* Sees the whole record, rupture included; its time is that of the change point it finds, when nobody could
  have told it. Its delay cannot be compared.
false: rigs with a detection where the rate never rises by 1 %, or before it begins to; withdrawn ones count.
missed, after 0.2 %: of turning rigs that broke, none until rupture, or after the 0.2 % offset.
delay/best: (detected - start)/(limit - start), median and 90th percentile; the limit is the best possible at
1 false in 200; a miss counts as never. A rig with a false detection is left out of misses and delays.
Helped: a record without slips, re-zeros, stuck readings and lost sides, that begins when any incubation or
inverse primary is over (this detector has all that), exact corrections for room and specimen temperature
where logged, and the best of some thousand settings."""


def _plain(value: Any) -> str:
    return " ".join(str(v) for v in value) if isinstance(value, tuple) else str(value)


def main() -> int:
    ask = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    ask.add_argument("--rigs-ours", type=int, default=2000)
    ask.add_argument("--rigs-others", type=int, default=400)
    ask.add_argument("--rigs-tuning", type=int, default=400)
    ask.add_argument("--seed", type=int, default=2024)
    ask.add_argument("--tuning-seed", type=int, help="default: the seed less one")
    ask.add_argument("--workers", type=int, default=1)
    ask.add_argument("--out", type=Path, default=Path("comparison"), help="folder for answers and table")
    ask.add_argument("--ours", type=Path, help="rows of this detector, written by campaign.py --out")
    told = ask.parse_args()
    tuning_seed = told.seed - 1 if told.tuning_seed is None else told.tuning_seed
    if tuning_seed == told.seed:
        ask.error(f"--tuning-seed: got {tuning_seed}, wanted another than --seed")
    if told.rigs_tuning < 1 / STRICT:
        ask.error(f"--rigs-tuning: got {told.rigs_tuning}, wanted at least {1 / STRICT:.0f}")
    if told.rigs_others < 1 or told.rigs_ours < 0:
        ask.error(
            f"got {told.rigs_others} rigs for the others, {told.rigs_ours} for ours, wanted 1 and 0 or more"
        )
    told.out.mkdir(parents=True, exist_ok=True)

    def rows_of(seed: int, rigs: int) -> list[Row]:
        truth = sources("simulator", "daq/core/limit.py", "daq/prove/score.py", "daq/prove/best.py")
        stamp = json.dumps({"seed": seed, "settings": others.fingerprint(), "truth": truth})
        jobs = [(seed, i) for i in range(rigs)]
        return kept(told.out / f"others-{seed}.jsonl", stamp, jobs, others_one, told.workers)

    tuning, rows = rows_of(tuning_seed, told.rigs_tuning), rows_of(told.seed, told.rigs_others)
    if told.ours is not None:
        text = told.ours.read_text(encoding="utf-8").splitlines()
        our_rows = [r for r in map(json.loads, text) if r["index"] < told.rigs_ours]
    else:
        code = sources("simulator", "daq/core", "daq/prove/score.py")
        stamp = json.dumps({"seed": told.seed, "detector": code})
        jobs = [(told.seed, i) for i in range(told.rigs_ours)]
        our_rows = kept(told.out / f"ours-{told.seed}.jsonl", stamp, jobs, run_one, told.workers)
    text = f"seed {told.seed}, others tuned on seed {tuning_seed}\n" + table(our_rows, tuning, rows)
    (told.out / f"table-{told.seed}.txt").write_text(text + "\n", encoding="utf-8")
    print(text)
    return 0


if __name__ == "__main__":
    sys.exit(main())
