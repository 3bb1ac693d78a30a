"""What comes next, and when: rupture, strain milestones, the 0.2 % offset; or why that cannot be said.

Looked at a few hundred times in a test, when its age has grown by a few per cent. In tertiary creep the
laws of ``core.laws`` are fitted to the curve (in equivalent time where that is known, so that a furnace
that wanders does not bend it). How much each law counts is decided by the curve so far and by
how well the law has predicted, look by look, on this very test (prequential log scores, Dawid 1984).

Rupture is told by the singular law alone: only it has an end. Where an exponential fits about as
well, where the growth is all but exponential, or where the interval spans more than a factor of ten
in time left, the answer is "none yet, because ...", never a number. If the rules hold a Monkman-Grant
constant, its estimate joins in, or stands alone.

Strain milestones: in tertiary by all laws, weighted; before, by primary creep and a steady rate fitted
together, the interval opened towards early times because tertiary creep may begin, and not further
ahead than one and a half times the age of the test.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core import horizon, laws
from daq.core.horizon import Interval
from daq.core.laws import EXPONENTIAL, SINGULAR, STEADY_EXPONENTIAL, Points, Posterior
from daq.core.rules import TestRules
from daq.records import FloatArray

COVERAGE: Final = 0.9
LEAST_POINTS: Final = 16
LEAST_WEIGHT: Final = 0.8
"""Weight that the singular law must have before it may tell a time of rupture."""
POWER_TOLD: Final = 2.1
"""Powers p above this (a below 1.5, the least seen in materials, Voight 1989) are all but exponential."""
POWER_DOUBT: Final = 0.1
WIDEST: Final = 11.0
"""Greatest ratio of late to early time left that is still called a forecast."""
MONKMAN_GRANT_SD: Final = 0.35
"""Log s.d. of lives about a Monkman-Grant line: two methods of one code differ by factors of 0.7 to 1.9 on
mean life (MPC Omega and Larson-Miller of WRC 541), which is a s.d. of about a third."""
AHEAD: Final = 1.5
FORGET: Final = 0.9
SCORE_MOST: Final = 2.0
"""Scores fade by a tenth a look, and one look counts for at most exp(2): a slip must not decide for good."""
SAY_AGAIN: Final = 0.05
"""A forecast is said again when its median or an edge has moved by this share of the time left."""
LOOK: Final = 0.05
LOOK_LEFT: Final = 0.1
LOOK_LEAST: Final = 0.005
LAWS: Final = (SINGULAR, EXPONENTIAL, STEADY_EXPONENTIAL)


@state
@dataclass(frozen=True, slots=True)
class Track:
    """How one law has predicted: faded log score; strain foretold at two instants: (h, mean, s.d.) each."""

    score: float = 0.0
    at_h: tuple[float, ...] = ()
    strain: tuple[float, ...] = ()
    sd: tuple[float, ...] = ()


@state
@dataclass(frozen=True, slots=True)
class ForecastState:
    """``tracks``: one per law; ``said``: last words on each event."""

    tracks: Mapping[str, Track] | None = None
    said: Mapping[str, Mapping[str, Any]] | None = None


def begin() -> ForecastState:
    """Return the state of a test of which nothing has been foretold."""
    return ForecastState()


def status(s: ForecastState) -> list[dict[str, Any]]:
    """Return the last words on each event still ahead."""
    return [dict(fields) for fields in (s.said or {}).values()]


def next_look_h(s: ForecastState, now_h: float) -> float:
    """Return when to look again: a twentieth of the age on, or a tenth of the time left to rupture, not below
    half a per cent of the age."""
    rupture = (s.said or {}).get("rupture", {})
    step = LOOK * now_h
    if "median_h" in rupture:
        step = min(step, max(LOOK_LEFT * (rupture["median_h"] - now_h), LOOK_LEAST * now_h))
    return now_h + step


def look(
    s: ForecastState,
    rules: TestRules,
    curve: Sequence[FloatArray],
    stage: str,
    now_h: float,
    *,
    least_h: float | None = None,
) -> tuple[ForecastState, list[dict[str, Any]]]:
    """Look ahead from ``now_h`` hours of test; return what is new to say.

    Args:
        curve: Block means in order of time, (n,) each: time [h], strain, rate [1/h] and, where known,
            equivalent time [h] and scans in each block. Without the latter, blocks weigh as they are wide.
        stage: Name of the stage the test is in.
        least_h: Time of least rate [h], if found; else it is read off the curve.

    Returns:
        New state, and for each event of which there is something new: ``of``, and ``low_h``,
        ``median_h``, ``high_h``, ``coverage`` or ``none_because``.
    """
    t_h, strain, rate = (np.asarray(x, float) for x in curve[:3])
    good = np.isfinite(t_h) & np.isfinite(strain)
    if int(good.sum()) < LEAST_POINTS:
        return s, []
    t_h, strain, rate = t_h[good], strain[good], np.nan_to_num(rate[good])
    time = np.asarray(curve[3], float)[good] if len(curve) > 3 else t_h
    time = time if np.isfinite(time).all() else t_h
    scans = np.asarray(curve[4], float)[good] if len(curve) > 4 else _widths(t_h)
    ahead = [x for x in rules.limits.milestones if x > float(strain[-1])]
    whole = (time, strain, rate, scans)
    if stage == "tertiary":
        least = least_of(time, strain, scans) if least_h is None else float(np.interp(least_h, t_h, time))
        s, told, seen = _in_tertiary(s, rules, whole, least, ahead)
    else:
        s, told, seen = _before(s, rules, whole, ahead, stage)
    # times left count from the last point of the fit; from there on, equivalent time is time
    return _say(s, told, float(t_h[-1]) - (float(time[-1]) - seen), now_h)


Curve = tuple[FloatArray, FloatArray, FloatArray, FloatArray]
Told = dict[str, Interval | str]


def strain_name(level: float) -> str:
    """Return the name of a strain milestone: 0.002 is ``strain_0p2_percent``."""
    return f"strain_{100.0 * level:g}_percent".replace(".", "p")


def _widths(t_h: FloatArray) -> FloatArray:
    width = np.gradient(t_h)
    return np.maximum(width, 1e-3 * float(np.median(width)))


def least_of(t: FloatArray, strain: FloatArray, scans: FloatArray) -> float:
    """Return when the rate was least: least slope from the mean before to the mean after, 15 % each way."""
    now = float(t[-1])
    total = np.concatenate(([0.0], np.cumsum(scans)))
    sum_t, sum_e = (np.concatenate(([0.0], np.cumsum(scans * x))) for x in (t, strain))
    centres = np.geomspace(0.03, 0.87, 60) * now
    a, b, d = (np.searchsorted(t, share * centres) for share in (0.85, 1.0, 1.15))
    full = (b - a >= 2) & (d - b >= 2)
    if not full.any():
        return 0.3 * now
    a, b, d = a[full], b[full], d[full]
    first, second = total[b] - total[a], total[d] - total[b]
    dt = (sum_t[d] - sum_t[b]) / second - (sum_t[b] - sum_t[a]) / first
    de = (sum_e[d] - sum_e[b]) / second - (sum_e[b] - sum_e[a]) / first
    return float(centres[full][int(np.argmin(de / np.maximum(dt, 1e-12 * now)))])


# --- in tertiary creep --------------------------------------------------------------------


def fit_laws(curve: Curve, least_h: float) -> tuple[Points, dict[str, Posterior]] | None:
    """Fit all laws to a curve from half the time of least rate on; None where too little is seen."""
    time, strain, rate, scans = curve
    window = time > 0.5 * least_h
    if int(window.sum()) < LEAST_POINTS or not float(time[-1]) > 1.02 * least_h:
        return None
    p = laws.thin(time[window], strain[window], scans[window], rate[window])
    whitening = laws.whitening_of(p)
    return p, {law: laws.fit(p, law, least_h, whitening) for law in LAWS}


def _in_tertiary(
    s: ForecastState, rules: TestRules, curve: Curve, least_h: float, ahead: Sequence[float]
) -> tuple[ForecastState, Told, float]:
    fitted = fit_laws(curve, least_h)
    if fitted is None:
        why: Told = {"rupture": "too little of the tertiary stage has been seen"}
        return replace(s, tracks=None), why, float(curve[0][-1])
    p, posts = fitted
    told: Told = {}
    tracks = _score(s.tracks or {}, curve[0], curve[1])
    weights = _weights(posts, tracks)
    s = replace(s, tracks={law: _foretell(tracks[law], posts[law], p, least_h) for law in LAWS})
    told["rupture"] = _rupture(rules, posts[SINGULAR], weights, p, least_h)
    mixed = [(posts[law], weights[law]) for law in LAWS if weights[law] > 1e-3]
    for level in ahead:
        told[strain_name(level)] = _milestone(horizon.strain_sample(mixed, p, least_h, level))
    offset = horizon.interval(horizon.offset_sample(mixed, p, least_h), COVERAGE)
    if offset.median > 0.0:
        told["offset_0p2_percent"] = _bounded(offset)
    return s, told, float(p.t_h[-1])


def _score(tracks: Mapping[str, Track], time: FloatArray, strain: FloatArray) -> dict[str, Track]:
    """Return the tracks with the curve since the last look held against what each law had foretold."""
    now = float(time[-1])
    new = {law: tracks.get(law, Track()) for law in LAWS}
    if any(not track.at_h for track in new.values()):
        return new
    first, last = new[SINGULAR].at_h[0], new[SINGULAR].at_h[-1]
    if now < first or now > last:
        return new
    scores = {}
    for law, track in new.items():
        mean = float(np.interp(now, track.at_h, track.strain))
        sd = float(np.interp(now, track.at_h, track.sd))
        z = (float(strain[-1]) - mean) / sd
        scores[law] = -math.log(sd) - 2.5 * math.log1p(z * z / 4.0)  # Student's t of four degrees of freedom
    top = max(scores.values())
    return {
        law: replace(track, score=FORGET * track.score + max(scores[law] - top, -SCORE_MOST))
        for law, track in new.items()
    }


def _foretell(track: Track, post: Posterior, p: Points, least_h: float) -> Track:
    """Return the track with the strain that the law foretells for the next looks."""
    now = float(p.t_h[-1])
    at = now * np.array([1.0, 1.03, 1.06, 1.12])
    mean, sd = horizon.predicted(post, p, least_h, at)
    own = abs(float(p.strain[-1] - mean[0]))
    scatter = _scatter(post, p, least_h)
    total = np.sqrt(sd**2 + scatter**2 + own**2)
    return replace(track, at_h=tuple(at.tolist()), strain=tuple(mean.tolist()), sd=tuple(total.tolist()))


def _scatter(post: Posterior, p: Points, least_h: float) -> float:
    """Return the s.d. of the points about the law's mean curve, never nothing."""
    mean, _ = horizon.predicted(post, p, least_h, p.t_h)
    rest = p.strain - mean
    span = float(p.strain.max() - p.strain.min())
    return max(float(np.sqrt(np.mean(rest * rest))), 1e-6 * span, 1e-12)


def _weights(posts: Mapping[str, Posterior], tracks: Mapping[str, Track]) -> dict[str, float]:
    logs = {law: posts[law].log_evidence + tracks[law].score for law in LAWS}
    top = max(logs.values())
    each = {law: math.exp(x - top) for law, x in logs.items()}
    total = sum(each.values())
    return {law: x / total for law, x in each.items()}


def _rupture(
    rules: TestRules,
    post: Posterior,
    weights: Mapping[str, float],
    p: Points,
    least_h: float,
) -> Interval | str:
    now = float(p.t_h[-1])
    prior_h = _monkman_grant(rules, post, p, least_h)
    why = ""
    if weights[SINGULAR] < LEAST_WEIGHT:
        if weights[SINGULAR] < 1.0 - LEAST_WEIGHT:
            why = "the rate grows exponentially with time; such growth has no end that would tell rupture"
        else:
            why = "laws with an end and laws without one still fit the curve about equally well"
    elif float(post.weight[post.second > POWER_TOLD].sum()) > POWER_DOUBT:
        why = "the rate grows almost exponentially with time; its end lies too far off to tell rupture"
    if why and prior_h is None:
        return why
    if why and prior_h is not None:  # the constant alone; its scatter is known, so its width is no objection
        return horizon.interval(horizon.life_sample(now, prior_h, MONKMAN_GRANT_SD), COVERAGE)
    sample = horizon.ends(post, now)
    if prior_h is not None:
        sample = horizon.with_prior(sample, now, prior_h, MONKMAN_GRANT_SD)
    found = horizon.interval(sample, COVERAGE)
    if found.high > WIDEST * found.low:
        late = f"between {found.low:.3g} and {found.high:.3g} h from now"
        return f"it would lie anywhere {late}, which is no forecast yet"
    return found


def _monkman_grant(rules: TestRules, post: Posterior, p: Points, least_h: float) -> float | None:
    """Return the life [h] by rate_min^m tr = C (Monkman & Grant 1956), None without a constant."""
    if rules.monkman_grant_constant is None:
        return None
    t = np.linspace(float(p.t_h[0]), float(p.t_h[-1]), 60)
    least = float((post.weight @ horizon.read_rate(post, p, least_h, t)).min())
    if not least > 0.0:
        return None
    return float(rules.monkman_grant_constant / least**rules.monkman_grant_exponent)


def _milestone(sample: horizon.Sample) -> Interval | str:
    reached = float(sample.weight[np.isfinite(sample.left_h)].sum() / sample.weight.sum())
    if reached < 0.5:
        return "rupture, or more than three times the age of the test, is expected before it"
    return _bounded(horizon.interval(sample, COVERAGE))


def _bounded(found: Interval) -> Interval | str:
    if not math.isfinite(found.high):
        return "it may not be reached before rupture, or lies too far off"
    if found.high > WIDEST * max(found.low, 1e-12) and found.low > 0.0:
        return f"it would lie anywhere between {found.low:.3g} and {found.high:.3g} h from now"
    return found


# --- before it ----------------------------------------------------------------------------


def _before(
    s: ForecastState, rules: TestRules, curve: Curve, ahead: Sequence[float], stage: str
) -> tuple[ForecastState, Told, float]:
    time, strain, rate, scans = curve
    now = float(time[-1])
    why = f"tertiary creep has not been detected ({stage})"
    told: Told = {"rupture": why, "offset_0p2_percent": why}
    window = time > 0.02 * now
    if int(window.sum()) < LEAST_POINTS:
        return replace(s, tracks=None), told, now
    p = laws.thin(time[window], strain[window], scans[window], rate[window])
    if len(p) < LEAST_POINTS:
        return replace(s, tracks=None), told, now
    onward = horizon.onward(p, laws.whitening_of(p))
    for level in ahead:
        found = horizon.reach(onward, level, now)
        if found is None or found.median > AHEAD * now:
            told[strain_name(level)] = (
                f"at this rate it lies further ahead than {AHEAD:g} times the age of the test"
            )
        else:
            told[strain_name(level)] = _bounded(found)
    return replace(s, tracks=None), told, float(p.t_h[-1])


# --- saying -------------------------------------------------------------------------------


def _say(
    s: ForecastState, told: Told, seen_h: float, now_h: float
) -> tuple[ForecastState, list[dict[str, Any]]]:
    """Return what differs from the last words. Times left count from ``seen_h``."""
    before = s.said or {}
    said: dict[str, Mapping[str, Any]] = {}
    out: list[dict[str, Any]] = []
    for of, found in told.items():
        fields: dict[str, Any] = {"of": of}
        if isinstance(found, str):
            fields["none_because"] = found
        else:
            low, median, high = (max(seen_h + x, now_h) for x in found)
            fields |= {"low_h": low, "median_h": median, "high_h": high, "coverage": COVERAGE}
        last = before.get(of)
        if last is None or _differs(last, fields, now_h):
            out.append(fields)
            said[of] = fields
        else:
            said[of] = last
    return replace(s, said=said), out


def _differs(last: Mapping[str, Any], fields: Mapping[str, Any], now_h: float) -> bool:
    if "none_because" in last or "none_because" in fields:
        return _reason(last) != _reason(fields)
    left = max(fields["median_h"] - now_h, 0.0)
    edges = ("low_h", "median_h", "high_h")
    return last["low_h"] < now_h or any(abs(last[k] - fields[k]) > SAY_AGAIN * left for k in edges)


def _reason(fields: Mapping[str, Any]) -> str:
    """Return why there is no forecast, without the figures in it: those change at every look."""
    return str(fields.get("none_because", "")).partition(" between ")[0]
