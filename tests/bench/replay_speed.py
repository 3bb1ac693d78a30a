"""How fast a replay is, from a recording and from a journal.

``python tests/bench/replay_speed.py --scans 100000`` makes a seeded record of one quiet frame with eight
channels (numbers of the demonstration), puts it into a CSV recording and into a sealed journal, and runs both
through the engine. Baseline in the same run: the same chunks decoded and added up, with no engine.
``--profile`` prints where the time goes.
"""

from __future__ import annotations

import argparse
import cProfile
import os
import pstats
import sys
import tempfile
import time
from collections.abc import Iterable
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

from daq import replay
from daq.core.rules import ChannelRules, Role, Specimen, TestRules, rules_to_json
from daq.recording import Recording
from daq.records import Fact, Quality, RulesAdopted, ScansTaken, Stamp
from daq.settings import Frame
from daq.store.journal import Journal
from daq.store.rows import Batch

CHANNELS = ("left", "right", "top", "mid", "bot", "room", "output", "load")
ROLES = (
    *[Role.STRAIN] * 2, *[Role.SPECIMEN_TEMPERATURE] * 3,
    Role.ROOM_TEMPERATURE, Role.CONTROLLER_OUTPUT, Role.FORCE,
)  # fmt: skip


def rules() -> TestRules:
    """Return the rules of the frame."""
    sides = ("A", "B", *[""] * 6)
    channels = tuple(ChannelRules(n, r, s) for n, r, s in zip(CHANNELS, ROLES, sides, strict=True))
    return TestRules(
        "bench", "H1", "H1", Specimen("S-1", "", 25.0, 6.0), channels, stress_pa=2e8, set_point_c=980.0,
        below_k=5.0, above_k=5.0, activation_energy_j_per_mol=330e3,
    )  # fmt: skip


def scans(n: int, every_s: float, seed: int) -> ScansTaken:
    """Return ``n`` scans of primary and steady creep with white noise, in decimal digits."""
    rng = np.random.default_rng(seed)
    t_h = np.arange(n) * every_s / 3600.0
    strain = 2e-3 * (1 - np.exp(-t_h / (0.1 * t_h[-1]))) + 5e-3 * t_h / t_h[-1]
    columns = [np.round(strain + 2e-5 * rng.standard_normal(n), 6) for _ in range(2)]
    columns += [np.round(980.0 + 0.3 * rng.standard_normal(n), 1) for _ in range(3)]
    columns += [
        np.round(22.0 + np.sin(2 * np.pi * t_h / 24), 2),
        np.round(41 + 0.2 * rng.standard_normal(n), 2),
    ]
    columns += [np.round(5654.87 + rng.standard_normal(n), 1)]
    tick = np.rint(t_h * 36e6).astype(np.int64)
    return ScansTaken(
        "H1", CHANNELS, "", tick, tick, np.column_stack(columns), np.full((n, 8), int(Quality.GOOD), np.uint8)
    )


def run(name: str, facts: Iterable[Fact], profile: bool) -> None:
    """Run facts through the engine and print the figures."""
    tally = replay.Tally()
    profiler = cProfile.Profile()
    if profile:
        profiler.enable()
    began = time.process_time()
    for _ in replay.run(facts, tally):
        pass
    cpu = time.process_time() - began
    if profile:
        profiler.disable()
        pstats.Stats(profiler, stream=sys.stdout).sort_stats("cumulative").print_stats(30)
    print(f"{name}: {tally.say()}; {tally.readings / cpu:,.0f} readings a CPU second, all told")


def main() -> None:
    """Make the record, run it, print."""
    p = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    p.add_argument("--scans", type=int, default=100_000)
    p.add_argument("--every-s", type=float, default=60.0)
    p.add_argument("--seed", type=int, default=1)
    p.add_argument("--profile", action="store_true")
    args = p.parse_args()
    whole = scans(args.scans, args.every_s, args.seed)
    r = rules()
    first = RulesAdopted(Stamp(0, 0, ""), "H1", "H1", rules_to_json(r))
    with tempfile.TemporaryDirectory() as folder:
        csv = Path(folder) / "H1.csv"
        with csv.open("w") as out:
            out.write("time_s," + ",".join(CHANNELS) + "\n")
            for tick, row in zip(whole.utc_tick.tolist(), whole.values.tolist(), strict=True):
                out.write(f"{tick / 1e4}," + ",".join(map(repr, row)) + "\n")
        record = Path(folder) / "record"
        with Journal.open(record, site="bench") as journal:
            journal.commit(Batch(facts=(first,)))
            for at in range(0, len(whole), 4096):
                journal.commit(Batch(facts=(whole.cut(at, at + 4096),)))
            while journal.seal():
                pass
        sealed = sum(f.stat().st_size for f in record.rglob("*.sqlite"))
        print(f"journal: {sealed / whole.values.size:.2f} bytes a reading, everything counted")
        began = time.process_time()
        total = sum(
            float(np.nansum(f.values)) for f in replay.journal_facts(record) if isinstance(f, ScansTaken)
        )
        cpu = time.process_time() - began
        speed = whole.values.size / cpu
        print(
            f"baseline, sealed chunks decoded and added up ({total:.6g}): {speed:,.0f} readings a CPU second"
        )
        run("journal", replay.journal_facts(record), args.profile)
        frame = Frame("H1", (r,), CHANNELS, {}, args.every_s)
        run("recording", replay.recording_facts(Recording(csv, "H1", CHANNELS), frame), False)


if __name__ == "__main__":
    main()
