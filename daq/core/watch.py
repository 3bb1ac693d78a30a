"""What is watched scan by scan: temperature, milestones and limits, rupture, sensors, load.

One pass over a block of scans, of any number: live one, in a replay thousands. The watchers work
on whole arrays and go step by step only where something changes; what a quiet scan costs is a few
comparisons. They share leaves of sixteen scans (``core.leaves``) for noise, rate and references.

Suspect readings: those marked as spike or as coming from a suspected sensor are passed over by the
temperature watch; all others, and all suspect strains, count, because each watcher asks for more than
one reading before it speaks.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core import band, drifting, leaves, milestones, rupture, sensors
from daq.core.band import BandState
from daq.core.block import Block, Conclusion, Cue
from daq.core.drifting import DriftState
from daq.core.leaves import LEAF, Cadence, Closed, Leaves
from daq.core.milestones import MeanState, MilestoneState
from daq.core.rules import Role, TestRules
from daq.core.rupture import Context, RuptureState
from daq.core.sensors import SensorState
from daq.core.torn import STILL, Motion
from daq.records import TICKS_PER_S, FloatArray, IntArray

LEAST_POINTS: Final = 14
"""Second differences of a whole leaf: the noise of a leaf with holes is not taken."""
RATE_CLEAR: Final = 0.9
RATE_LASTS: Final = 0.03
RATE_LASTS_VAGUE: Final = 0.2
RATE_KNOWN: Final = 0.7
"""A rate is known well where the lower 90 % limit is at least this share of it."""
RATE_FAR: Final = 1.5
ENDED: Final = frozenset({"ruptured", "ended"})


@state
@dataclass(frozen=True, slots=True)
class WatchState:
    """State of all watchers. ``rate_armed``: the rate was surely below its limit once (early primary does
    not count); ``rate_since_s``, ``rate_below_s``: since when every look had it surely above, or below;
    ``standing``: cues that stand, (alarm, subject), for the end of the test."""

    leaves: Leaves
    cadence: Cadence
    mean: MeanState
    motion: Motion
    band: BandState
    milestones: MilestoneState
    rupture: RuptureState
    sensors: SensorState
    drifting: DriftState
    rate_armed: bool = False
    rate_high: bool = False
    rate_since_s: float | None = None
    rate_below_s: float | None = None
    over: bool = False
    standing: tuple[tuple[str, str], ...] = ()


Item = Conclusion | Cue


def begin(rules: TestRules) -> WatchState:
    """Return the state before the first scan."""
    temperature = band.begin(rules)
    columns = len(temperature.signals) + 1 + 5  # output; sides, mean strain, force, room
    return WatchState(
        leaves.begin(columns), Cadence(), MeanState(), STILL, temperature, milestones.begin(rules),
        RuptureState(), sensors.begin(rules), drifting.begin(rules),
    )  # fmt: skip


def watch(
    s: WatchState,
    rules: TestRules,
    block: Block,
    *,
    stage: str = "",
    step_correction: FloatArray | None = None,
) -> tuple[WatchState, tuple[Item, ...]]:
    """Take n scans of one test; return findings and cues in the order of scans.

    Args:
        stage: Stage of the test during the whole block; in ``ruptured`` or ``ended`` nothing is watched.
        step_correction: What slips have added to the mean strain of each scan [m/m], to be taken off for
            milestones and the strain limit; (n,).
    """
    if s.over or stage in ENDED or not len(block):
        return s, ()
    cadence, paced = leaves.pace(s.cadence, block.tick, rules.scan_every_s)
    mean_state, mean = milestones.mean_strain(s.mean, block.strain_a, block.strain_b)
    signals = band.signals(rules, block)
    a, b, room = block.strain_a[:, None], block.strain_b[:, None], block.room_c[:, None]
    columns = np.concatenate((signals, a, b, mean[:, None], _force(rules, block), room), axis=1)
    open_leaf, closed = leaves.take(s.leaves, block.tick, columns)
    motions, ends = _motions(s.motion, closed, signals.shape[1] + 2)
    linked = (block.values == block.values).any(axis=1)

    temperature, items = band.watch_band(
        s.band, rules, block, signals, paced, _only(closed, signals.shape[1])
    )
    passed = mean if step_correction is None else mean - step_correction
    ahead = s.milestones
    if ahead.ahead:
        ahead, said = milestones.watch_milestones(ahead, block, passed, _noise(motions, ends, len(block)))
        items.extend(said)
    context = Context(motions, ends, linked, paced.interval >= paced.gap, stage)
    broken, torn = rupture.watch_rupture(s.rupture, rules, block, context)
    believed, doubts = sensors.watch_sensors(s.sensors, rules, block, paced, linked)
    noise = np.array([m.noise for m in motions[1:]])
    believed, apart = sensors.watch_sides(
        believed, block, closed, signals.shape[1], signals.shape[1] + 1, noise
    )
    width = signals.shape[1]
    slow, named = drifting.watch_drift(s.drifting, rules, block, closed, width - 1, width + 4)
    broke = next((c for c in torn if c.alarm == "rupture"), None)
    if broke is not None:  # no strain is passed by what tore
        ahead, items = MilestoneState(()), [i for i in items if not _passed_by_rupture(i, broke)]
    items += [*torn, *doubts, *apart, *named]
    items.sort(key=lambda item: item.scan)
    after = WatchState(
        open_leaf, cadence, mean_state, motions[-1], temperature, ahead, broken, believed, slow,
        s.rate_armed, s.rate_high, s.rate_since_s, s.rate_below_s, False, _stand(s.standing, items),
    )  # fmt: skip
    return after, tuple(items)


def watch_rate(
    s: WatchState, rules: TestRules, scan: int, tick: int, t_s: float, rate: tuple[float, float, float]
) -> tuple[WatchState, tuple[Cue, ...]]:
    """Hold a new rate (value, 90 % limits) [1/h] at ``t_s`` against ``limits.rate_per_h``.

    Neighbouring looks share most of their readings: one that is high by chance has company, but not for
    long. So the lower limit must be above at every look of a stretch: of 3 % of the elapsed time where the
    rate is known well (``RATE_KNOWN``), of 20 % where it is not, which is twice the tenth of the time that a
    rate is taken over; a rate known well and half as high again as the limit is told at the second look.
    High rates just after loading do not count: the rate must have been below the limit, its upper 90 % limit
    over half such a stretch. It is over when the rate is nine tenths down.
    """
    limit, (value, low, high) = rules.limits.rate_per_h, rate
    if limit is None or s.over or not math.isfinite(value):
        return s, ()
    known = value > 0.0 and low >= RATE_KNOWN * value
    s = _arm(s, t_s, high < limit, known)
    if s.rate_high:
        if value >= RATE_CLEAR * limit:
            return s, ()
        cues = (Cue(scan, tick, "rate_limit", "", False),)
        return replace(s, rate_high=False, rate_since_s=None, standing=_stand(s.standing, cues)), cues
    if not s.rate_armed or not low > limit:
        return replace(s, rate_since_s=None), ()
    if s.rate_since_s is None:
        return replace(s, rate_since_s=t_s), ()
    lasting = t_s >= s.rate_since_s * (1.0 + (RATE_LASTS if known else RATE_LASTS_VAGUE))
    if not lasting and not (known and low > RATE_FAR * limit):
        return s, ()
    message = f"strain rate {100.0 * value:.3g} %/h, limit {100.0 * limit:.3g} %/h"
    figures = {"rate_per_h": value, "low_per_h": low, "limit_per_h": limit, "from_h": s.rate_since_s / 3600.0}
    cues = (Cue(scan, tick, "rate_limit", "", True, message, None, figures),)
    return replace(s, rate_high=True, standing=_stand(s.standing, cues)), cues


def _arm(s: WatchState, t_s: float, below: bool, known: bool) -> WatchState:
    """Note that the rate was below its limit, at once where it is known well."""
    if s.rate_armed:
        return s
    since = (t_s if s.rate_below_s is None else s.rate_below_s) if below else None
    armed = since is not None and (known or t_s >= since * (1.0 + 0.5 * RATE_LASTS_VAGUE))
    return replace(s, rate_armed=armed, rate_below_s=since)


def doubt(s: WatchState) -> str | None:
    """Return why a rate that rises may be a specimen hotter than indicated, None where nothing says so."""
    return drifting.doubt(s.drifting)


KEPT: Final = frozenset({"rupture", "milestone_reached", "strain_limit"})
"""Cues that the end of a test does not take back: they stay true."""


def end(
    s: WatchState, rules: TestRules, tick: int, t_s: float, scan: int
) -> tuple[WatchState, tuple[Item, ...]]:
    """End the watch: excursions that are open are told, conditions let go; nothing is watched after."""
    if s.over:
        return s, ()
    temperature, items = band.end(s.band, rules, tick, scan)
    let_go = {(c.alarm, c.subject) for c in items if isinstance(c, Cue)}
    items += [
        Cue(scan, tick, alarm, subject, False)
        for alarm, subject in s.standing
        if alarm not in KEPT and (alarm, subject) not in let_go
    ]
    return replace(s, band=temperature, over=True, standing=()), tuple(items)


def status(s: WatchState) -> dict[str, Any]:
    """Return plain values for screens: strain now, next milestone, conditions that stand."""
    ahead = [p.level for p in s.milestones.ahead if p.milestone]
    strain = s.mean.last
    return {
        "strain": strain if strain == strain else None,
        "next_milestone": ahead[0] if ahead else None,
        "conditions": [{"alarm": alarm, "subject": subject} for alarm, subject in s.standing],
    }


# --- shared -----------------------------------------------------------------------------


def _stand(standing: tuple[tuple[str, str], ...], items: Any) -> tuple[tuple[str, str], ...]:
    for item in items:
        if isinstance(item, Cue):
            key = (item.alarm, item.subject)
            if item.active and key not in standing:
                standing = (*standing, key)
            elif not item.active:
                standing = tuple(k for k in standing if k != key)
    return standing


def _passed_by_rupture(item: Item, broke: Cue) -> bool:
    """Is this a strain that was passed only because the specimen broke?"""
    if isinstance(item, Conclusion):
        strain, time_h = item.kind == "milestone", item.fields.get("time_h", 0.0)
    else:
        strain, time_h = item.alarm in ("milestone_reached", "strain_limit"), item.figures.get("time_h", 0.0)
    last_h = broke.figures.get("not_before_h", broke.figures["time_h"])
    return strain and (item.scan > broke.scan or (item.scan == broke.scan and time_h > last_h))


def _force(rules: TestRules, block: Block) -> FloatArray:
    for i, channel in enumerate(rules.channels):
        if channel.role is Role.FORCE:
            return np.where(block.t_s[:, None] >= 0.0, np.abs(block.values[:, i : i + 1]), np.nan)
    return np.full((len(block), 1), np.nan)


def _only(closed: Closed | None, columns: int) -> Closed | None:
    return None if closed is None else replace(closed, mean=closed.mean[:, :columns])


def _motions(motion: Motion, closed: Closed | None, column: int) -> tuple[tuple[Motion, ...], IntArray]:
    """Return the motion as known before the block and after each leaf, and where the leaves end."""
    if closed is None:
        return (motion,), np.empty(0, np.int64)
    x = closed.columns[:, :, column]
    bend = np.sort(np.abs(x[:, 1:-1] - 0.5 * (x[:, :-2] + x[:, 2:])), axis=1)
    noise = (1.4826 / math.sqrt(1.5)) * 0.5 * (bend[:, 6] + bend[:, 7])
    step = np.abs(np.diff(x, axis=1)).max(axis=1)
    middle = 0.5 * (closed.tick[:, LEAF // 2 - 1] + closed.tick[:, LEAF // 2])
    mean, force = closed.mean[:, column], closed.mean[:, column + 1]
    whole = np.isfinite(x).all(axis=1)
    out = [motion]
    for k, complete in enumerate(np.asarray(whole).tolist()):
        m = out[-1]
        f = float(force[k])
        held = m.force if f != f or f < 0.5 * m.force else f
        if not complete:
            out.append(replace(m, force=held))
            continue
        seconds = (float(middle[k]) - m.tick) / TICKS_PER_S
        rate = (float(mean[k]) - m.mean) / seconds if seconds > 0.0 else math.nan
        out.append(Motion(rate, float(step[k]), float(noise[k]), float(middle[k]), float(mean[k]), held))
    return tuple(out), closed.end


def _noise(motions: tuple[Motion, ...], ends: IntArray, n: int) -> FloatArray:
    """Return the noise of a scan as known before each of n scans."""
    if not ends.size:
        return np.full(n, motions[0].noise)
    known = np.array([m.noise for m in motions])
    return known[np.searchsorted(ends, np.arange(n), "right")]
