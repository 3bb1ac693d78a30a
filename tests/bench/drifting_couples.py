"""Is a thermocouple that drifts under control named, how late, and how often is one accused that does not?

    python tests/bench/drifting_couples.py --rigs 200 --seed 1

Rigs of the population that have thermocouples and are at least three days long, with the controller output
logged. To every other one a drift is given: 2 to 6 K, either way, over a hundredth to a half of the record,
of the couple in control. Furnaces are the bench's own: output 25 to 70 %, per kelvin by physics between pure
conduction and pure radiation, half of the outputs in per cent of voltage (half the slope), room likewise.
To the output a slow disorder is added that the simulator does not know: first-order wander of mains and
winding, of 0.05 to 1 % of output ("quiet" up to 0.2 %) with a memory of 2 to 100 h, and a day wave of as
much.
Only the watch is run; it does not ask for rate or stage. The same seed gives the same table.
"""

from __future__ import annotations

import argparse
import math
import sys
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "core"))

from rig_facts import rules_of, scans_of

from daq.core import watch
from daq.core.block import Cue
from daq.core.convert import convert, prepare
from daq.core.drifting import ALARM
from simulator.population import draw
from simulator.rig import Run, simulate
from simulator.spec import Event, RigSpec, Sampling
from simulator.world import first_order_noise

STREAM = 77
LEAST_H = 72.0
QUIET = 0.002
CUT = 4096


@dataclass(frozen=True)
class Case:
    """One rig with the bench's furnace; ``drift`` None where nothing drifts."""

    run: Run
    drift: Event | None
    disorder: float


@dataclass(frozen=True)
class Outcome:
    """``cries``: (channel, hours) of alarms; ``doubted``: was there a doubt at the end?"""

    case: Case
    cries: tuple[tuple[str, float, str], ...]
    doubted: bool


def cases(seed: int, rigs: int, couples: tuple[int, ...] = (1, 3)) -> Iterator[Case]:
    """Yield ``rigs`` rigs with a drift and as many without, by turns."""
    index = done = 0
    while done < 2 * rigs:
        spec = draw(seed, index)
        rng = np.random.default_rng([seed, index, STREAM])
        index += 1
        if len(spec.thermocouples) not in couples or spec.longest_h < LEAST_H:
            continue
        yield _case(spec, rng, drifts=done % 2 == 0)
        done += 1


def _case(spec: RigSpec, rng: np.random.Generator, drifts: bool) -> Case:
    t_c, share = spec.furnace.set_point_c, float(rng.uniform(0.0, 1.0))
    by_power = 1.0 if rng.random() < 0.5 else 0.5
    output = float(rng.uniform(25.0, 70.0))
    conducted, radiated = 1.0 / (t_c - spec.room.mean_c), 4.0 / (t_c + 273.15)
    slope = by_power * ((1.0 - share) * conducted + share * radiated)
    furnace = replace(
        spec.furnace, control="mid", output_percent=output, output_per_k=output * slope,
        output_per_room_k=output * by_power * conducted * float(rng.uniform(0.3, 2.0)),
    )  # fmt: skip
    last = simulate(replace(spec, furnace=furnace, sampling=Sampling(spec.longest_h * 4.0))).truth.end_h
    drift = None
    if drifts:
        size = float(rng.choice([-1.0, 1.0])) * float(rng.uniform(2.0, 6.0))
        hours = last * float(np.exp(rng.uniform(math.log(0.01), math.log(0.5))))
        drift = Event("thermocouple_drift", float(rng.uniform(0.1, 0.9)) * (last - hours), size, hours, "mid")
    others = [e for e in spec.events if e.kind != "thermocouple_drift"]
    events = sorted([*others, *([drift] if drift else [])], key=lambda e: e.at_h)
    run = simulate(replace(spec, furnace=furnace, events=tuple(events), output_channel=True))
    disorder = float(np.exp(rng.uniform(math.log(0.0005), math.log(0.01))))
    memory = float(np.exp(rng.uniform(math.log(2.0), math.log(100.0))))
    t_h = np.maximum.accumulate(run.columns["time_s"]) / 3600.0
    slow = first_order_noise(rng, t_h, disorder, memory)
    slow = slow + disorder * np.cos(2.0 * np.pi * (t_h / 24.0 + rng.random()))
    columns: Mapping[str, np.ndarray] = {
        **run.columns, "output": np.round(run.columns["output"] + output * slow, 2),
    }  # fmt: skip
    return Case(replace(run, columns=columns), drift, disorder)


def judge(case: Case) -> Outcome:
    """Run the watch over a rig."""
    rules, scans = rules_of(case.run.spec), scans_of(case.run)
    plan, state = prepare(rules, scans.channels), watch.begin(rules)
    cries: list[tuple[str, float, str]] = []
    for at in range(0, len(scans), CUT):
        part = scans.cut(at, min(at + CUT, len(scans)))
        tick = part.boot_tick
        block = convert(rules, plan, part, tick, tick / 36e6 * 3600.0, at)
        state, items = watch.watch(state, rules, block, stage="secondary")
        cries += [
            (i.subject, i.tick / 36e6, i.message)
            for i in items
            if isinstance(i, Cue) and i.alarm == ALARM and i.active
        ]
    return Outcome(case, tuple(cries), watch.doubt(state) is not None)


def _row(name: str, found: list[Outcome]) -> str:
    n = len(found)
    delays, early, wrong = [], 0, 0
    for o in found:
        assert o.case.drift is not None
        drift = o.case.drift
        named = [h for c, h, _ in o.cries if c == "mid" and h >= drift.at_h]
        wrong += any(c != "mid" for c, _, _ in o.cries)
        early += any(h < drift.at_h for _, h, _ in o.cries)
        if named:
            delays.append((named[0] - drift.at_h) / o.case.run.truth.end_h)
    if not n:
        return f"{name:34s} none"
    middle, late = np.quantile(delays, [0.5, 0.9]) if delays else (math.nan, math.nan)
    return f"{name:34s} {n:5d} {len(delays) / n:8.1%} {middle:8.1%} {late:8.1%} {wrong:7d} {early:7d}"


def main() -> None:
    ask = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    ask.add_argument("--rigs", type=int, default=200)
    ask.add_argument("--seed", type=int, default=1)
    ask.add_argument("--couples", type=int, choices=(1, 3), help="only rigs with so many")
    ask.add_argument("--show", action="store_true", help="print every alarm of a rig without drift")
    args = ask.parse_args()
    found = [judge(case) for case in cases(args.seed, args.rigs, (args.couples,) if args.couples else (1, 3))]
    drifted = [o for o in found if o.case.drift is not None]
    plain = [o for o in found if o.case.drift is None]

    def couples(o: Outcome) -> int:
        return len(o.case.run.spec.thermocouples)

    print(
        f"{'drift of 2 to 6 K in control':34s} {'rigs':>5s} {'named':>8s} {'delay':>8s} {'90th':>8s}", end=""
    )
    print(f" {'other':>7s} {'before':>7s}")
    for n in (3, 1):
        for quiet in (True, False):
            rows = [o for o in drifted if couples(o) == n and (o.case.disorder <= QUIET) == quiet]
            print(_row(f"{n} couples, output {'quiet' if quiet else 'restless'}", rows))
            big = [o for o in rows if o.case.drift is not None and abs(o.case.drift.size) >= 3.0]
            print(_row("   of these 3 K and more", big))
    print("delay: from the begin of the drift, share of record; other: another couple accused; before: early")
    for n in (3, 1):
        some = [o for o in plain if couples(o) == n]
        print(f"no drift, {n} couples: {sum(bool(o.cries) for o in some)} of {len(some)} cried, ", end="")
        print(f"{sum(o.doubted for o in some)} with a doubt at the end")
    if args.show:
        for o in plain:
            for cry in o.cries:
                print(f"{o.case.run.spec.kind} {o.case.run.truth.end_h:.0f} h, {o.case.disorder:.4f}: {cry}")


if __name__ == "__main__":
    main()
