"""Follows one test: scans in, stages, least rate, onsets and steps out.

Scans become leaves (``intake``), leaves the ladder (``ladder``). At *looks*, spaced geometrically in time
so that their number grows with the logarithm of the test, the evidence for a rising rate is weighed
(``evidence``), judged (``verdict``) and moves the stage table (``stages``). Rates come from ``estimate``.
The state is pure and canonical; nothing depends on how scans were cut into blocks."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core import clean, estimate, evidence, intake, ladder, late, shape, trend, verdict
from daq.core.block import Block, Conclusion
from daq.core.estimate import Minimum
from daq.core.intake import IntakeState
from daq.core.rules import GAS_CONSTANT_J_PER_MOL_K, ZERO_C_IN_K, Loading, Role, TestRules
from daq.core.stages import Cue, Stage, following
from daq.records import FloatArray

LOOKS: Final = ((4.0, 0.008), (1.0, 0.02), (-np.inf, 0.05))
"""Spacing of looks as a share of elapsed time, by the evidence there is at least. Evidence grows with the
fourth to seventh power of the time since onset, so from 1 to a verdict that time grows by half: looks are
never so far apart that much is lost."""
LOOK_LATE: Final = 0.05
"""And in tertiary, where only the onsets still to come and a withdrawal are looked for."""
LEAST_RUNGS: Final = 24
"""Rungs needed for a look: three times the parameters of the plainest curve with a rise."""
STEADY_CHANGE: Final = 0.25
"""Secondary: the rate changed by less than this over the last half of the elapsed time, with 95 %
confidence on each side. Cube-root creep changes by 37 % over any such half, logarithmic creep by 50 %:
neither is steady."""
FIT_THIN: Final = (0.04, 0.004, 0.05)
"""How far blocks are merged for fits (``ladder.thinned``)."""
BRIEF: Final = 0.1
LASTING: Final = 0.03
"""A rise within the last tenth of the time must last for 3 % of it under the eyes of the follower: what
drift of a few hours does in so short a stretch goes back in the next, while damage goes on."""
LEAP: Final = 0.25
ABRUPT_LASTS: Final = 0.5
"""A rise that came in one leap, within the last quarter of the time, must last for this share of the time
since its onset: after stairs of jerky creep, or of a side that was stuck, the rate is as before; damage leaps
higher."""
TAKEN_BACK: Final = -1.0
BACK_LOOKS: Final = 3
"""A detection is withdrawn when at this many late looks on end the falling family fits better by a factor
e."""
SPARE: Final = 15
"""Blocks needed beyond the free columns: with fewer, room and specimen temperature are left out."""
STEADY_LEAST: Final = 0.02
"""Share of the expected life before which nothing is called steady: no engineering alloy is through its
primary creep by then (common practice, no source)."""
FAST: Final = 2.0
"""Rate over the least from which on tertiary is beyond doubt: nothing is taken back, no small jump looked
for."""
CALM: Final = 1.0
"""Evidence for a rise above which nothing is called steady."""
Q_ERROR: Final = 0.25
"""Relative s.d. of a handbook activation energy (common practice, no source)."""
Q_UNKNOWN: Final = 350e3
"""J/mol: the middle of what metals show (CHECKVALUES 7.2), the s.d. where none is given."""


JERKY: Final = "jerky creep: this jump and those before it are put back, later ones are left in"


def _no_models() -> FloatArray:
    return np.zeros((0, 4))


@state
@dataclass(frozen=True, slots=True)
class FollowState:
    """All that the follower carries; see the modules for the parts."""

    stage: Stage = Stage.HEATING
    since_h: float | None = None
    intake: IntakeState = field(default_factory=IntakeState)
    rungs: FloatArray = field(default_factory=ladder.empty)
    leaves: int = 0
    next_look_h: float = 0.0
    window_h: float = 0.0
    models: FloatArray = field(default_factory=_no_models)
    log_ratio: float = 0.0
    falling_looks: int = 0
    rising_h: float | None = None
    rising_since_h: float = 0.0
    rise_ratio: float = 1.0
    model: tuple[float, float] = (0.1, 1.0)
    minimum: Minimum | None = None
    corrected_per_h: float | None = None
    rise_5_h: float | None = None
    offset_h: float | None = None
    counts: tuple[tuple[str, int], ...] = ()
    paused: bool = False
    now_h: float = 0.0


def begin(rules: TestRules) -> FollowState:
    """Return the state before the first scan."""
    return FollowState()


def stage_of(s: FollowState) -> str:
    """Return the name of the stage."""
    return s.stage.value


def follow(s: FollowState, rules: TestRules, block: Block) -> tuple[FollowState, tuple[Conclusion, ...]]:
    """Take a block of converted scans; rows before full load have ``t_s`` < 0 and are left out."""
    if s.paused or s.stage in (Stage.RUPTURED, Stage.ENDED):
        return s, ()
    fresh = intake.rows_of(block, s.intake.origin_s)
    if fresh.shape[0] == 0:
        return s, ()
    out: list[Conclusion] = []
    if s.stage in (Stage.HEATING, Stage.SOAKING, Stage.LOADING):
        first = fresh[0]
        s = _move(
            s, Cue.FULL_LOAD, int(first[intake.SCAN]), int(first[intake.TICK]), 0.0, None, "full load", out
        )
    return _work(s, rules, np.concatenate((s.intake.rows, fresh)), False, out)


def _work(
    s: FollowState, rules: TestRules, rows: FloatArray, final: bool, out: list[Conclusion]
) -> tuple[FollowState, tuple[Conclusion, ...]]:
    clock = np.maximum(np.maximum.accumulate(rows[:, intake.T_S]), s.intake.clock_s)
    at = 0
    while at < rows.shape[0]:
        before = s.intake
        fed, at, leaf = intake.next_leaf(before, rules, rows, clock, at, final)
        if leaf is None:
            break
        s = replace(s, intake=fed, now_h=leaf.now_h)
        if leaf.step is not None:
            out.append(_step(leaf, rules, len(s.intake.jerks) >= clean.JERKS))
        if leaf.rung is not None:
            rungs = np.concatenate((s.rungs, leaf.rung))
            leaves = s.leaves + 1
            if leaves % ladder.SWEEP_EVERY == 0:
                rungs = ladder.sweep(rungs, leaf.now_h)
            s = replace(s, rungs=rungs, leaves=leaves)
        if len(s.intake.jerks) >= clean.JERKS:
            fed, rungs = intake.give_back(s.intake, s.rungs)
            s = replace(s, intake=fed, rungs=rungs)
        if leaf.rung is not None and leaf.now_h >= s.next_look_h and s.rungs.shape[0] >= LEAST_RUNGS:
            s = _look(s, rules, leaf.scan, leaf.tick, out)
    s = replace(s, intake=replace(s.intake, rows=rows[at:].copy()))
    return s, tuple(out)


def tell(
    s: FollowState, rules: TestRules, cue: str, tick: int, t_s: float, scan: int
) -> tuple[FollowState, tuple[Conclusion, ...]]:
    """Take word from outside: ``ruptured``, ``ended``, ``stress_changed``, ``interrupted``, ``resumed``,
    and, before full load, ``at_temperature`` and ``load_begun``."""
    out: list[Conclusion] = []
    if s.stage in (Stage.RUPTURED, Stage.ENDED):
        return s, ()
    if cue == "interrupted":
        return replace(s, paused=True), ()
    if cue == "resumed":
        i = s.intake
        fed = replace(i, context=i.context[:0], segment=i.segment + 1)
        return replace(s, paused=False, intake=fed), ()
    if cue in ("at_temperature", "load_begun"):
        s = _move(s, Cue(cue), scan, tick, t_s / 3600.0, None, cue.replace("_", " "), out)
        return s, tuple(out)
    if s.stage not in (Stage.HEATING, Stage.SOAKING, Stage.LOADING) and s.intake.rows.shape[0]:
        s, said = _work(s, rules, s.intake.rows, True, [])
        out += [replace(c, scan=max(c.scan, scan), tick=max(c.tick, tick)) for c in said]
    time_h = (t_s - s.intake.origin_s) / 3600.0
    if s.rungs.shape[0] >= LEAST_RUNGS:
        s = _last_words(s, rules, scan, tick, cue == "ruptured", out)
    why = {"ruptured": "rupture", "ended": "test ended", "stress_changed": "stress changed"}[cue]
    s = _move(s, Cue(cue), scan, tick, time_h, None, why, out)
    if cue == "stress_changed":
        i = s.intake
        fresh = IntakeState(
            origin_s=t_s,
            clock_s=t_s,
            reference_c=i.reference_c,
            temp_c=i.temp_c,
            rooms_c=i.rooms_c,
            offsets=i.offsets,
            noise=i.noise,
            half=i.half,
            scan=i.scan,
            tick=i.tick,
        )
        s = FollowState(stage=s.stage, since_h=0.0, intake=fresh, counts=s.counts)
    return s, tuple(out)


# --- looks ------------------------------------------------------------------------------


def _windowed(s: FollowState) -> FloatArray:
    """Return the rungs since the window began, with times counted from there."""
    if s.window_h <= 0.0:
        return s.rungs
    r = s.rungs[s.rungs[:, ladder.START] >= s.window_h].copy()
    if r.shape[0] == 0:
        return r
    t0, u0 = r[0, ladder.START], r[0, ladder.U] - (r[0, ladder.T] - r[0, ladder.START])
    r[:, [ladder.T, ladder.START, ladder.END]] -= t0
    r[:, ladder.U] -= u0
    return r


def _weigh(s: FollowState, rules: TestRules, r: FloatArray) -> evidence.Evidence:
    temp = r[:, ladder.TEMP]
    has_temp = bool(np.isfinite(temp).all())
    q_error = per_kelvin = 0.0
    if has_temp:
        q = rules.activation_energy_j_per_mol
        kelvin = float(temp[-1]) + ZERO_C_IN_K
        per_q = 1.0 / (GAS_CONSTANT_J_PER_MOL_K * kelvin**2)
        q_error = (Q_ERROR * q if q is not None else Q_UNKNOWN) * per_q
        per_kelvin = (q if q is not None else Q_UNKNOWN) * per_q
    has_room = bool(np.isfinite(r[:, ladder.ROOM0]).all())
    d = evidence.design(
        r, has_temperature=has_temp, has_room=has_room, q_error=q_error, per_kelvin=per_kelvin
    )
    if d.x.size < d.free.shape[1] + SPARE:
        d = evidence.design(r, has_temperature=False, has_room=False)
    return evidence.weigh(d, s.model)


def _look(s: FollowState, rules: TestRules, scan: int, tick: int, out: list[Conclusion]) -> FollowState:
    now = s.now_h
    s = _small_jumps(s, rules, scan, tick, out)
    if s.stage is Stage.TERTIARY:
        return _look_late(s, rules, scan, tick, out)
    r = _windowed(s)
    s = replace(s, log_ratio=min(s.log_ratio, 0.0))
    if (
        r.shape[0] >= LEAST_RUNGS
        and r[-1, ladder.T] > r[0, ladder.T]
        and (trend.rising(r) or s.models.shape[0] == 0)
    ):
        e = _weigh(s, rules, r)
        levels = verdict.levels(rules.false_share)
        s = replace(s, models=e.noise, model=e.model, log_ratio=e.log_ratio, rise_ratio=e.rise_ratio)
        cue = verdict.judge(e, s.stage, now, levels, rules.expected_rupture_h, trend.accelerates(r))
        if cue is not Cue.RATE_ROSE:
            s = replace(s, rising_h=None)
        else:
            since_h = e.since * float(r[-1, ladder.T])
            if s.rising_h is None:
                s = replace(s, rising_h=now, rising_since_h=since_h)
            began = now if s.rising_h is None else s.rising_h
            brief = e.since < BRIEF and now < began * (1.0 + LASTING)
            leap = e.rise_ratio > verdict.ABRUPT and e.since < LEAP
            abrupt = leap and now - began < ABRUPT_LASTS * s.rising_since_h
            if brief or abrupt or not verdict.has_lasted(e.log_ratio, now - began, s.rising_since_h, levels):
                cue = None
        if cue is Cue.RATE_ROSE:
            return _turn(s, rules, e, scan, tick, out)
        if cue is Cue.RATE_ROSE_EARLY:
            why = (
                f"the rate rises before any fall: inverse primary creep, a slow recovery after loading or, "
                f"if it goes on, tertiary without primary (evidence {e.log_ratio:.1f})"
            )
            s = _move(s, cue, scan, tick, now * (1.0 - e.since), None, why, out)
    if s.stage is Stage.INVERSE_PRIMARY:
        s = _after_inverse(s, scan, tick, out)
    if s.stage in (Stage.PRIMARY, Stage.INVERSE_PRIMARY) and s.models.shape[0] and s.log_ratio < CALM:
        s = _steady(s, rules, scan, tick, out)
    elif s.stage is Stage.SECONDARY and s.models.shape[0] and s.log_ratio < CALM:
        s = _fell_on(s, scan, tick, out)
    spacing = next(share for least, share in LOOKS if s.log_ratio >= least)
    return replace(s, next_look_h=now * (1.0 + spacing))


def _small_jumps(
    s: FollowState, rules: TestRules, scan: int, tick: int, out: list[Conclusion]
) -> FollowState:
    """Take a jump out that only the means of many scans show; not where the rate climbs or creep is jerky."""
    if s.intake.jerky or (s.stage is Stage.TERTIARY and s.rise_ratio >= FAST):
        return s
    count = max((c for c in s.intake.counts if np.isfinite(c)), default=0.0)
    found = late.find(s.rungs, s.models, count)
    if found is None:
        return s
    fed, rungs = late.take_out(s.intake, s.rungs, found)
    names = [c.name for c in rules.channels if c.role in (Role.STRAIN, Role.EXTENSION)]
    told = {"channels": names, "time_h": found.time_h, "size": found.size, "cause": late.CAUSE}
    out.append(Conclusion(scan, tick, "step", ",".join(names), told))
    return replace(s, intake=fed, rungs=rungs)


def _after_inverse(s: FollowState, scan: int, tick: int, out: list[Conclusion]) -> FollowState:
    """Begin the window of evidence where the rate was greatest, once it has fallen from there."""
    t, rate, _ = estimate.coarse_rates(s.rungs, 0.1)
    top = int(np.argmax(rate))
    if top < rate.size - 2 and rate[-1] < 0.93 * rate[top]:
        s = replace(s, window_h=float(t[top]))
        return _move(
            s, Cue.RATE_FALLS, scan, tick, float(t[top]), None, "the rate falls from its early peak", out
        )
    return s


def _change(s: FollowState) -> tuple[float, float] | None:
    r = _windowed(s)
    return trend.change_of_rate(r, s.models) if r.shape[0] >= LEAST_RUNGS else None


def _steady(s: FollowState, rules: TestRules, scan: int, tick: int, out: list[Conclusion]) -> FollowState:
    expected = rules.expected_rupture_h
    if expected is not None and s.now_h < STEADY_LEAST * expected:
        return s
    known = _change(s)
    if known is None or abs(known[0]) + estimate.Z90 * known[1] >= STEADY_CHANGE:
        return s
    why = (
        f"over the last half of the time the rate changed by {100 * known[0]:+.0f} % "
        f"+- {100 * estimate.Z90 * known[1]:.0f} %, within {100 * STEADY_CHANGE:.0f} %"
    )
    begin_h = s.window_h + 0.5 * (float(s.rungs[-1, ladder.T]) - s.window_h)
    return _move(s, Cue.RATE_STEADY, scan, tick, begin_h, None, why, out)


def _fell_on(s: FollowState, scan: int, tick: int, out: list[Conclusion]) -> FollowState:
    """Take secondary back where the rate has surely fallen on since: any smooth curve looks steady while a
    test is young."""
    known = _change(s)
    if known is None or known[0] + estimate.Z90 * known[1] > -STEADY_CHANGE:
        return s
    why = (
        f"over the last half of the time the rate fell by {-100 * known[0]:.0f} % "
        f"+- {100 * estimate.Z90 * known[1]:.0f} %: it was not steady yet"
    )
    return _move(s, Cue.RATE_FELL_ON, scan, tick, s.window_h, None, why, out)


def _fit_least(s: FollowState, rules: TestRules) -> tuple[Minimum, float | None] | None:
    """Fit the least rate as measured, and in equivalent time where there is one."""
    r = s.rungs[s.rungs[:, ladder.START] >= s.window_h]
    if r.shape[0] < 12 or s.models.shape[0] == 0:
        return None
    t, rates = shape.unimodal(r, s.models)
    r = ladder.thinned(r, *FIT_THIN)
    m = estimate.minimum(r, s.models, t, rates)
    if m is None:
        return None
    corrected = None
    if rules.activation_energy_j_per_mol is not None and np.isfinite(s.intake.reference_c):
        u = np.interp(t, r[:, ladder.T], r[:, ladder.U])
        speed = np.gradient(u, t)
        again = estimate.minimum(r, s.models, u, rates / np.maximum(speed, 1e-3), ladder.U)
        corrected = None if again is None else again.rate
    return m, corrected


def _turn(
    s: FollowState, rules: TestRules, e: evidence.Evidence, scan: int, tick: int, out: list[Conclusion]
) -> FollowState:
    """Conclude tertiary, with the least rate and the onsets as far as they are known."""
    fitted = _fit_least(s, rules)
    now = s.now_h
    onset = (now - s.window_h) * (1.0 - e.since) + s.window_h
    interval: tuple[float, float] | None = None
    why = f"the rate has risen to {e.rise_ratio:.2f} times the least (log evidence {e.log_ratio:.1f})"
    if fitted is not None:
        m, corrected = fitted
        onset, interval = m.time_h, (m.time_low_h, m.time_high_h)
        n = rules.stress_exponent
        if rules.loading is Loading.CONSTANT_LOAD and n is not None:
            strain = float(s.rungs[-1, ladder.E]) - m.strain
            by_section = np.expm1(n * strain)
            why += (
                f"; the shrinking section alone explains {100 * by_section:.1f} % of the rise of "
                f"{100 * (e.rise_ratio - 1):.1f} % (n = {n:g})"
            )
        s = replace(s, minimum=m, corrected_per_h=corrected)
    s = _move(s, Cue.RATE_ROSE, scan, tick, onset, interval, why, out)
    s = replace(s, next_look_h=now * (1.0 + LOOK_LATE), falling_looks=0)
    return _say_rates(s, scan, tick, True, out, fitted)


def _say_rates(
    s: FollowState,
    scan: int,
    tick: int,
    turned: bool,
    out: list[Conclusion],
    fitted: tuple[Minimum, float | None] | None,
) -> FollowState:
    if fitted is None:
        return s
    m, corrected = fitted
    r = s.rungs[s.rungs[:, ladder.START] >= s.window_h]
    out.append(_minimum(m, corrected, scan, tick))
    rise = estimate.rise_5_percent(r, s.models, m)
    offset = estimate.offset_0p2(r, m)
    for name, when in (
        ("minimum_rate", m.time_h if turned else None),
        ("rate_rise_5_percent", rise if turned else None),
        ("offset_0p2_percent", offset if turned else None),
    ):
        out.append(_onset(name, when, scan, tick))
    return replace(s, minimum=m, corrected_per_h=corrected, rise_5_h=rise, offset_h=offset)


def _look_late(s: FollowState, rules: TestRules, scan: int, tick: int, out: list[Conclusion]) -> FollowState:
    """In tertiary: onsets that have been reached since, and whether the rise has gone back."""
    now = s.now_h
    m = s.minimum
    if m is not None and (s.rise_5_h is None or s.offset_h is None):
        r = s.rungs[s.rungs[:, ladder.START] >= s.window_h]
        if s.rise_5_h is None:
            rise = estimate.rise_5_percent(r, s.models, m)
            if rise is not None:
                out.append(_onset("rate_rise_5_percent", rise, scan, tick))
                s = replace(s, rise_5_h=rise)
        offset = estimate.offset_0p2(r, m)
        if s.offset_h is None and offset is not None:
            out.append(_onset("offset_0p2_percent", offset, scan, tick))
            s = replace(s, offset_h=offset)
    if s.rise_ratio < FAST and s.offset_h is None:
        e = _weigh(s, rules, _windowed(s))
        s = replace(s, log_ratio=e.log_ratio, rise_ratio=e.rise_ratio, models=e.noise, model=e.model)
        falling = s.falling_looks + 1 if e.against_falling < TAKEN_BACK else 0
        s = replace(s, falling_looks=falling)
        if falling >= BACK_LOOKS:
            why = "the rate has gone back to what it was: the rise was not tertiary creep"
            s = _move(s, Cue.RISE_TAKEN_BACK, scan, tick, now, None, why, out)
            s = replace(s, falling_looks=0, rise_5_h=None, offset_h=None)
    return replace(s, next_look_h=now * (1.0 + LOOK_LATE))


def _last_words(
    s: FollowState, rules: TestRules, scan: int, tick: int, ruptured: bool, out: list[Conclusion]
) -> FollowState:
    if s.models.shape[0] == 0:
        s = replace(s, models=_weigh(s, rules, s.rungs).noise)
    turned = ruptured or s.stage is Stage.TERTIARY
    return _say_rates(s, scan, tick, turned, out, _fit_least(s, rules))


# --- conclusions ------------------------------------------------------------------------


def _move(
    s: FollowState,
    cue: Cue,
    scan: int,
    tick: int,
    onset_h: float | None,
    interval: tuple[float, float] | None,
    why: str,
    out: list[Conclusion],
) -> FollowState:
    """Move the stage table by ``cue``; conclude where that changes the stage."""
    after = following(s.stage, cue)
    if after is s.stage and cue is not Cue.STRESS_CHANGED:
        return s
    counts = dict(s.counts)
    withdraws = None
    if cue is Cue.RISE_TAKEN_BACK:
        withdraws = f"{Stage.TERTIARY.value}|{counts.get(Stage.TERTIARY.value, 1)}"
    elif cue is Cue.RATE_FELL_ON:
        withdraws = f"{Stage.SECONDARY.value}|{counts.get(Stage.SECONDARY.value, 1)}"
    counts[after.value] = counts.get(after.value, 0) + 1
    fields: dict[str, Any] = {
        "stage": after.value,
        "from": s.stage.value,
        "onset_h": onset_h,
        "onset_low_h": interval[0] if interval else None,
        "onset_high_h": interval[1] if interval else None,
        "withdraws": withdraws,
        "why": why,
    }
    out.append(Conclusion(scan, tick, "stage", after.value, fields))
    return replace(s, stage=after, since_h=onset_h, counts=tuple(sorted(counts.items())))


def _minimum(m: Minimum, corrected: float | None, scan: int, tick: int) -> Conclusion:
    return Conclusion(
        scan,
        tick,
        "minimum_rate",
        "",
        {
            "rate_per_h": m.rate,
            "low_per_h": m.low,
            "high_per_h": m.high,
            "time_h": m.time_h,
            "corrected_rate_per_h": corrected,
        },
    )


def _onset(definition: str, time_h: float | None, scan: int, tick: int) -> Conclusion:
    return Conclusion(scan, tick, "onset", definition, {"definition": definition, "time_h": time_h})


def _step(leaf: intake.Leaf, rules: TestRules, jerky: bool) -> Conclusion:
    step = leaf.step
    assert step is not None
    names = [c.name for c in rules.channels if c.side in step.sides or (not c.side and "A" in step.sides)]
    names = [c.name for c in rules.channels if c.name in names and c.role.value in ("strain", "extension")]
    return Conclusion(
        leaf.scan,
        leaf.tick,
        "step",
        ",".join(names),
        {
            "channels": names,
            "time_h": step.time_h,
            "size": step.size,
            "cause": JERKY if jerky else clean.cause_of(step.sides, step.sizes, step.both_there),
        },
    )


# --- for screens and forecasts ----------------------------------------------------------


def status(s: FollowState, rules: TestRules) -> Mapping[str, Any]:
    """Return plain values for screens: stage, strain, rate now with interval, least rate, trend."""
    told: dict[str, Any] = {
        "stage": s.stage.value,
        "since_h": s.since_h,
        "strain": None,
        "rate_per_h": None,
        "rate_low_per_h": None,
        "rate_high_per_h": None,
        "minimum_rate_per_h": None,
        "minimum_low_per_h": None,
        "minimum_high_per_h": None,
        "minimum_time_h": None,
        "corrected_minimum_rate_per_h": None,
        "rise_ratio": None,
        "evidence": s.log_ratio,
        "trend": "unknown",
        "onset_rise_5_percent_h": s.rise_5_h,
        "onset_offset_0p2_h": s.offset_h,
    }
    if s.rungs.shape[0]:
        told["strain"] = float(s.rungs[-1, ladder.E])
    if s.rungs.shape[0] >= 8:
        models = s.models
        if models.shape[0] == 0:
            white = ladder.white_sd(s.rungs)
            models = np.array([[1.0, 0.0, (white if np.isfinite(white) else 1e-5) ** 2, 1.0]])
        rate, low, high = estimate.rate_now(s.rungs, models)
        if np.isfinite(rate):
            told |= {"rate_per_h": rate, "rate_low_per_h": low, "rate_high_per_h": high}
        m = s.minimum
        if m is not None:
            told |= {
                "minimum_rate_per_h": m.rate,
                "minimum_low_per_h": m.low,
                "minimum_high_per_h": m.high,
                "minimum_time_h": m.time_h,
                "corrected_minimum_rate_per_h": s.corrected_per_h,
                "rise_ratio": rate / m.rate if m.rate > 0 else None,
            }
        told["trend"] = {
            Stage.PRIMARY: "falling",
            Stage.SECONDARY: "steady",
            Stage.TERTIARY: "rising",
            Stage.INVERSE_PRIMARY: "rising early",
        }.get(s.stage, "unknown")
    return told


def curve(s: FollowState) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return (t_h, strain, rate_per_h, equivalent time [h], scans) of the ladder's blocks, each (n,).

    Rates are taken over about 3 % of the test.
    """
    r = s.rungs
    rate = np.full(r.shape[0], np.nan)
    if r.shape[0] >= 4:
        t, coarse, _ = estimate.coarse_rates(r, 0.03)
        rate = np.interp(r[:, ladder.T], t, coarse) if t.size else rate
    return r[:, ladder.T], r[:, ladder.E], rate, r[:, ladder.U], r[:, ladder.N]
