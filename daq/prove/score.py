"""One simulated rig through the follower, and what came of it against the truth.

The row that comes out holds plain JSON values and is all that a table needs. Times are hours of the test.
A tertiary detection is *false* where the true rate does not rise within the record, or not yet.

Levels of evidence share their work. A stricter level cannot conclude anything before a looser one does: as
long as no level has moved a stage, all carry the same state. So the loosest goes first, and the next begins
where that one first moved. A test holds the outcome against runs from the start.
"""

from __future__ import annotations

import time
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from daq.core import follow, limit
from daq.core.block import Block, Conclusion
from daq.core.follow import FollowState
from daq.core.rules import TestRules
from daq.prove import best
from simulator.rig import Run, Truth

LEVELS: Final = (0.2, 0.05, 0.02, 0.005, 0.001, 1e-4, 1e-6)
"""False shares at which rigs are followed beside the lab file's own: as far as that key may go."""
UNIT_SHARE: Final = 1.0 / 200.0
"""The best possible delay is that of a method false in one of 200 tests, whatever level is tried."""
_FIRST_CUT: Final = 64
"""Scans fed at once before the follower looks for the first time."""
_PAST_LOOK: Final = 1.004
"""How far past the next look scans are fed at once: a leaf, and less than the way to the look after."""


@dataclass(frozen=True, slots=True)
class Point:
    """A place in a rig's record: next scan, state, conclusions, and (hour, evidence) of the looks so far."""

    at: int
    state: FollowState
    said: tuple[Conclusion, ...] = ()
    looks: tuple[tuple[float, float], ...] = ()


def block_of(run: Run) -> Block:
    """Return the whole run as one block of converted scans."""
    c = run.columns
    n = c["time_s"].size
    none = np.full(n, np.nan)
    sides = {t.side: c[t.name] for t in run.spec.transducers}
    couples = [c[t.name] for t in run.spec.thermocouples]
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


def hear(
    rules: TestRules, block: Block, start: Point | None = None, enough_h: float | None = None
) -> tuple[Point, Point]:
    """Follow ``block``; return the point where that ended, and the last one before a level could matter.

    Scans are fed past one look at a time, so that the evidence of every look is seen. Cuts change nothing.

    Args:
        start: Where to begin; None for the first scan.
        enough_h: Stop after a tertiary detection at this hour or later; None to go on to the end.
    """
    s, at, said, looks = follow.begin(rules), 0, [], []
    if start is not None:
        s, at, said, looks = start.state, start.at, list(start.said), list(start.looks)
    fork: Point | None = None
    while at < len(block):
        upto = at + _FIRST_CUT
        if s.next_look_h > 0.0:
            upto = int(np.searchsorted(block.t_s, s.next_look_h * 3600.0 * _PAST_LOOK, side="right"))
        upto = min(max(upto, at + 1), len(block))
        after, some = follow.follow(s, rules, block.cut(at, upto))
        if fork is None and _level_mattered(s, after, some):
            fork = Point(at, s, tuple(said), tuple(looks))
        if after.next_look_h != s.next_look_h:
            looks.append((after.now_h, after.log_ratio))
        s, at = after, upto
        said += some
        if enough_h is not None and any(
            float(block.t_s[c.scan]) >= enough_h * 3600.0 for c in some if _is_tertiary(c)
        ):
            break
    end = Point(at, s, tuple(said), tuple(looks))
    return end, fork or end


def _is_tertiary(c: Conclusion) -> bool:
    return c.kind == "stage" and c.key == "tertiary"


def _level_mattered(before: FollowState, after: FollowState, said: Iterable[Conclusion]) -> bool:
    """Say whether a rise was concluded, or is waited for to last: elsewhere no level has a part."""
    rose = any(c.kind == "stage" and c.key in ("tertiary", "inverse_primary") for c in said)
    return rose or before.rising_h != after.rising_h


def detections(
    said: Iterable[Conclusion], block: Block, turned: float | None
) -> tuple[list[float], float | None, bool]:
    """Return the hours of all tertiary detections, the first true one, and whether any was false.

    Args:
        turned: When the true rate turned [h]; None where it never did.
    """
    at = [float(block.t_s[c.scan]) / 3600.0 for c in said if _is_tertiary(c)]
    true = [h for h in at if turned is not None and h >= turned]
    return at, (true[0] if true else None), len(true) < len(at)


def turned_h(truth: Truth) -> float | None:
    """Return when the true rate turned [h]; None where it does not rise within the record."""
    if not truth.rises:
        return None
    return truth.minimum_h if truth.first_rise_h is None else truth.first_rise_h


def score(run: Run, rules: TestRules, index: int, levels: Sequence[float] = LEVELS) -> dict[str, Any]:
    """Return the row of one rig: plain JSON values, ``cpu_s`` alone not the same every time.

    Args:
        rules: The rules that the rig's lab file would give; ``false_share`` is the level of the row itself.
        levels: False shares tried beside it; () for none.
    """
    truth, turned = run.truth, turned_h(run.truth)
    whole = block_of(run)
    n = len(whole)
    if truth.rupture_h is not None:
        n = int(np.searchsorted(whole.t_s, truth.rupture_h * 3600.0, side="right"))
    block = whole.cut(0, n)
    began = time.process_time()
    tried: list[dict[str, Any]] = []
    fork: Point | None = None
    own: Point | None = None
    for share in sorted({*levels, rules.false_share}, reverse=True):
        mine = share == rules.false_share
        enough = None if mine else (turned or 0.0)
        end, fork = hear(replace(rules, false_share=share), block, fork, enough)
        own = end if mine else own
        _, true_h, false = detections(end.said, block, turned)
        tried.append({"false_share": share, "true_h": true_h, "false": false})
    assert own is not None
    cue = "ended" if truth.rupture_h is None else "ruptured"
    _, last = follow.tell(own.state, rules, cue, int(block.tick[n - 1]), float(block.t_s[n - 1]), n - 1)
    spent = time.process_time() - began
    return {
        **_truth(run, block),
        "index": index,
        "scans": n,
        "cpu_s": spent,
        "expected_h": rules.expected_rupture_h,
        "levels": tried if levels else [],
        "evidence_before": max((x for h, x in own.looks if turned is None or h < turned), default=0.0),
        **_heard((*own.said, *last), block, turned),
    }


def _truth(run: Run, block: Block) -> dict[str, Any]:
    """What the table needs of the truth, and the bounds that follow from it."""
    truth = run.truth
    strained = np.isfinite(block.strain_a) | np.isfinite(block.strain_b)
    seen_s = block.t_s[strained]
    equivalent_h = np.maximum.accumulate(np.interp(np.sort(seen_s) / 3600.0, truth.t_h, truth.equivalent_h))
    found = best.least_rate_error(run, equivalent_h)
    return {
        "kind": truth.kind,
        "rises": truth.rises,
        "turns": truth.turns_tertiary,
        "min_h": truth.minimum_h,
        "first_h": truth.first_rise_h,
        "end_h": truth.end_h,
        "offset_h": truth.offset_0p2_h,
        "rise5_h": truth.rise_5_percent_h,
        "min_rate": truth.minimum_rate_per_h,
        "indicated_rate": best.rate_as_indicated(run),
        "run_rate": best.rate_as_run(run),
        "best_error": found[0] if found else None,
        "best_bias": found[1] if found else None,
        "limit_h": limit_of(run) if truth.rises else None,
        "ruptured": truth.rupture_h is not None,
        "seen_h": float(seen_s.max()) / 3600.0 if seen_s.size else 0.0,
        "noise": [truth.noise.white, *map(list, truth.noise.drifts)],
        "events": [[e.kind, round(e.at_h, 2), e.size] for e in truth.events],
    }


def _heard(said: Sequence[Conclusion], block: Block, turned: float | None) -> dict[str, Any]:
    """What the table needs of the conclusions."""
    hours = {c: float(block.t_s[c]) / 3600.0 for c in {x.scan for x in said}}
    detected, true_h, false = detections(said, block, turned)
    first = next((x for x in said if _is_tertiary(x) and hours[x.scan] == true_h), None)
    least = [dict(x.fields) for x in said if x.kind == "minimum_rate"]
    return {
        "stages": [
            [x.fields["stage"], round(hours[x.scan], 3), x.fields["onset_h"], x.fields["why"]]
            for x in said
            if x.kind == "stage"
        ],
        "steps": [
            [x.fields["time_h"], x.fields["size"], x.fields["channels"]] for x in said if x.kind == "step"
        ],
        "onsets": {x.key: x.fields["time_h"] for x in said if x.kind == "onset"},
        "detected_h": detected,
        "false": false,
        "true_h": true_h,
        "onset": None
        if first is None or first.fields["onset_low_h"] is None
        else [first.fields["onset_low_h"], first.fields["onset_high_h"]],
        "least": least[-1] if least else None,
    }


def limit_of(run: Run) -> float | None:
    """Return the best possible detection time [h], None where the record is too short for any.

    Inverse primary: scans before the end of the incubation are left out, a rising rate there is none.
    """
    truth = run.truth
    t_s = np.sort(run.columns["time_s"])
    t_s = t_s[(t_s >= truth.incubation_h * 3600.0) & (t_s <= truth.end_h * 3600.0)]
    equivalent_s = np.maximum.accumulate(np.interp(t_s / 3600.0, truth.t_h, truth.equivalent_h)) * 3600.0
    strain = run.spec.creep.envelope.strain(equivalent_s / 3600.0)
    at = limit.detectable_at(equivalent_s, strain, best.limit_noise(run), limit.level_for(UNIT_SHARE))
    return None if at is None else float(np.interp(at / 3600.0, truth.equivalent_h, truth.t_h))
