"""The other detectors of the comparison: each at every setting of its grid, from one pass over a rig.

What they are given (more than a laboratory has, so that nobody can call the comparison unfair):

- "helped": the record of the same rig without its slips, re-zeros, stuck readings and lost sides: it is
  simulated again without these events, all noise the same; and where the rate rises first (incubation,
  inverse primary) it begins when that is over, as the truth has it.
- "corrected": helped, and without the apparent strain of room and specimen temperature wherever that
  temperature is logged (simulated again with coefficients of zero, as if known exactly), against the
  temperature-equivalent time that follows from the thermocouples and the activation energy that the
  laboratory was told.
- "as recorded": none of this, for what they make of the record that this program gets.
- Strain is the mean of the sides, a missing side filled in from the other and the difference before; spikes
  are replaced by a running median of five (two readings of the future; judged by the whole record's scatter).
- Primary creep is left out: they compare with the least rate so far, and may be told to wait until it has
  stood for a share of the elapsed time. Nothing counts before a tenth of the expected life where it is told.

A detector's answer is the time of its first alarm in test hours, for each setting; None is no alarm.
"""

from __future__ import annotations

import dataclasses
import hashlib
import itertools
import json
from collections.abc import Iterator
from dataclasses import dataclass
from importlib.util import find_spec
from typing import Any

import numpy as np
import numpy.typing as npt
from charts import cusum, ewma, ewma_spread

from simulator import population
from simulator.onset import equivalent_time_h
from simulator.rig import Run, simulate
from simulator.spec import RigSpec

Array = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]

INPUTS = ("helped", "corrected", "as recorded")
LOOK = 0.005
"""A slope is looked at anew after this share of the elapsed time."""
FEWEST_SCANS = 8
BLOCK_SCANS = 4
"""Fewest scans of a stretch that a slope is taken over, and of a block."""
WAIT_SHARE = 0.1
"""Of the expected life: nothing counts before."""
BLOCK_RULES = (("share", 0.01), ("share", 0.03), ("share", 0.06), ("scans", 10))
KINDS = ("slope", "means")
"""Block rate: least-squares slope inside the block, or mean less the mean before over the time between."""
RECENT = 6
"""Blocks whose mean is compared and whose least mean so far is the reference."""
SCATTER = 30
"""Differences of neighbouring block rates that the scatter is judged by; at least a third of them."""
RISES = (0.0, 0.1)
"""Share by which the rate must exceed the least so far."""

WINDOWS = (0.05, 0.1, 0.2, 0.3, 0.45)
RATIOS = (1.0, 1.03, 1.05, 1.08, 1.1, 1.15, 1.2, 1.3, 1.4, 1.6, 1.8, 2.0, 2.5, 3.0, 4.0, 6.0, 10.0)
MARGINS = (0.0, 3.0, 6.0, 12.0, 24.0)
STOOD = (0.0, 0.15, 0.3)
PERSIST = (0.0, 0.05, 0.1, 0.2)
STOOD_BLOCKS = (0.0, 0.2)
CUSUM_K = (0.25, 0.5, 1.0, 2.0, 4.0)
CUSUM_H = tuple(float(f"{1.5 * 1.4**i:.2g}") for i in range(20))
EWMA_WEIGHT = (0.05, 0.1, 0.2, 0.4)
EWMA_LIMIT = tuple(float(f"{1.8 * 1.22**i:.2g}") for i in range(20))
PH_DELTA = (0.1, 0.25, 0.5, 1.0)
PH_THRESHOLD = CUSUM_H
ADWIN_DELTA = (0.3, 0.1, 0.03, 0.01, 2e-3, 1e-4, 1e-6)
ADWIN_SCALE = (0.1, 0.3, 1.0)
"""ADWIN's bound is for values of about unit range: standardised block rates times this."""
KERNEL_BLOCKS = (50, 100, 200)
KERNELS = ("linear", "rbf")
PENALTIES = {
    "linear": tuple(float(f"{4.0 * 1.8**i:.2g}") for i in range(16)),
    "rbf": tuple(float(f"{0.5 * 1.45**i:.2g}") for i in range(16)),
}
KERNEL_RATIOS = (1.0, 1.05, 1.1, 1.2, 1.5)


def _grid(**axes: tuple[Any, ...]) -> list[dict[str, Any]]:
    return [dict(zip(axes, values, strict=True)) for values in itertools.product(*axes.values())]


_BLOCKS = {"input": INPUTS, "block": BLOCK_RULES, "rate": KINDS}
SETTINGS: dict[str, list[dict[str, Any]]] = {
    "slope over the last stretch": _grid(
        input=INPUTS, window=WINDOWS, stood=STOOD, margin=MARGINS, ratio=RATIOS, persists=PERSIST
    ),
    "CUSUM on block rates": _grid(**_BLOCKS, rise=RISES, stood=STOOD_BLOCKS, k=CUSUM_K, h=CUSUM_H),
    "EWMA on block rates": _grid(
        **_BLOCKS, rise=RISES, stood=STOOD_BLOCKS, weight=EWMA_WEIGHT, limit=EWMA_LIMIT
    ),
    "Page-Hinkley (river)": _grid(
        **_BLOCKS, rise=RISES, stood=STOOD_BLOCKS, delta=PH_DELTA, threshold=PH_THRESHOLD
    ),
    "ADWIN (river)": _grid(**_BLOCKS, rise=RISES, stood=STOOD_BLOCKS, delta=ADWIN_DELTA, scale=ADWIN_SCALE),
    "KernelCPD (ruptures), hindsight": [
        {"input": i, "blocks": n, "kernel": kernel, "penalty": p, "ratio": x}
        for i, n, kernel in itertools.product(INPUTS, KERNEL_BLOCKS, KERNELS)
        for p, x in itertools.product(PENALTIES[kernel], KERNEL_RATIOS)
    ],
}
"""Every setting of every detector, in the order of the answers."""
NEEDS = {
    "Page-Hinkley (river)": "river",
    "ADWIN (river)": "river",
    "KernelCPD (ruptures), hindsight": "ruptures",
}
HINDSIGHT = frozenset({"KernelCPD (ruptures), hindsight"})


def available() -> list[str]:
    """Return the detectors whose library is installed."""
    return [m for m in SETTINGS if m not in NEEDS or find_spec(NEEDS[m]) is not None]


def fingerprint() -> str:
    """Return a few digits that change with any grid or constant, so that old answers are not mixed in."""
    constants = (
        "least upper limit",
        LOOK,
        FEWEST_SCANS,
        BLOCK_SCANS,
        WAIT_SHARE,
        RECENT,
        SCATTER,
        available(),
    )
    text = json.dumps([SETTINGS, constants], sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()[:12]


@dataclass(frozen=True)
class Record:
    """What a detector sees: lab time [h], time in which rates are taken [h], both from 0, mean strain [1]."""

    t_h: Array
    clock_h: Array
    strain: Array
    wait_h: float


class Slopes:
    """Least-squares slopes over any stretches of scans, from running sums.

    The scatter about a line counts as half that of the whole record about its running median at least: a few
    scans of one and the same converter count are not without error.
    """

    def __init__(self, record: Record) -> None:
        self.unit = float(record.clock_h[-1]) or 1.0
        t, y = record.clock_h / self.unit, record.strain - record.strain.mean()
        self.floor = 0.5 * float(np.sqrt(np.mean((y - running_median(y, 5)) ** 2)))
        columns = np.stack([np.ones_like(t), t, y, t * t, t * y, y * y])
        self.sums = np.concatenate([np.zeros((6, 1)), np.cumsum(columns, axis=1)], axis=1)

    def over(self, low: Any, high: Any) -> tuple[Array, Array, Array, Array]:
        """Return rate [1/h], its standard error for white noise, mean clock [h] and mean strain.

        Of scans low .. high - 1; NaN where there are fewer than three or all at one time.
        """
        n, t, y, tt, ty, yy = self.sums[:, high] - self.sums[:, low]
        with np.errstate(all="ignore"):
            sxx, sxy, syy = tt - t * t / n, ty - t * y / n, yy - y * y / n
            good = (n >= 3) & (sxx > 1e-16)
            rate = np.where(good, sxy / sxx, np.nan)
            error = np.sqrt(np.maximum((syy - rate * sxy) / (n - 2), self.floor**2) / sxx)
            return rate / self.unit, error / self.unit, t / n * self.unit, y / n


def prepare(spec: RigSpec, kind: str) -> Record:
    """Return what the detectors are given of a rig; see the head of this module."""
    events, transducers = spec.events, spec.transducers
    if kind != "as recorded":
        gone = ("slip", "rezero", "spike", "stuck")
        events = tuple(e for e in events if e.kind not in gone and not (e.kind == "lost" and e.channel))
    if kind == "corrected":
        transducers = tuple(
            dataclasses.replace(
                c,
                per_room_k=0.0 if spec.room_channel else c.per_room_k,
                per_specimen_k=0.0 if spec.thermocouples else c.per_specimen_k,
            )
            for c in transducers
        )
    run = simulate(dataclasses.replace(spec, events=events, transducers=transducers))
    columns = run.columns
    t_h = columns["time_s"] / 3600.0
    strain = mean_of_sides(t_h, [columns[c.name] for c in transducers])
    keep = np.isfinite(strain) & (t_h <= run.truth.end_h)
    if kind != "as recorded":
        keep &= t_h >= run.truth.incubation_h
    clock_h = t_h - t_h[0]
    told = spec.told
    if kind == "corrected" and spec.thermocouples and told.activation_energy_j_per_mol is not None:
        hot = np.mean([columns[c.name] for c in spec.thermocouples], axis=0)
        q = told.activation_energy_j_per_mol
        clock_h = equivalent_time_h(clock_h, hot, spec.furnace.set_point_c, q)
    wait = 0.0 if told.expected_rupture_h is None else WAIT_SHARE * told.expected_rupture_h
    return Record(t_h[keep], clock_h[keep], without_spikes(strain[keep]), wait)


def mean_of_sides(t_h: Array, sides: list[Array]) -> Array:
    """Return the mean of one or two sides; where one is missing, the other and their difference of late."""
    if len(sides) == 1:
        return sides[0]
    a, b = sides
    both = np.isfinite(a) & np.isfinite(b)
    if not both.any():
        return np.where(np.isfinite(a), a, b)
    half = np.interp(t_h, t_h[both], running_median(a[both] - b[both], 25) / 2.0)
    return np.where(both, (a + b) / 2.0, np.where(np.isfinite(a), a - half, b + half))


def running_median(x: Array, width: int) -> Array:
    """Return the median of ``width`` (odd) neighbours, the ends repeated outwards."""
    padded = np.pad(x, width // 2, mode="edge")
    return np.asarray(np.median(np.lib.stride_tricks.sliding_window_view(padded, width), axis=1))


def without_spikes(x: Array) -> Array:
    """Return ``x`` with values replaced that leave the running median of five by six robust deviations."""
    middle = running_median(x, 5)
    off = np.abs(x - middle)
    typical = np.median(off[off > 0.0]) if np.any(off > 0.0) else 0.0
    return np.asarray(np.where(off > 6.0 * 1.4826 * typical, middle, x))


def first_alarms(seed: int, index: int) -> tuple[Run, dict[str, list[float | None]]]:
    """Return a rig's run and, for each detector and setting, the hour of the first alarm or None."""
    spec = population.draw(seed, index)
    methods = available()
    records = {kind: prepare(spec, kind) for kind in INPUTS}
    answers: dict[str, list[float | None]] = {m: [] for m in methods}
    for record in records.values():  # "input" is the first axis of every grid
        slopes = Slopes(record)
        found: dict[str, list[Array]] = {m: [] for m in methods}
        found["slope over the last stretch"] = list(_by_hand(record, slopes))
        for rule, kind in itertools.product(BLOCK_RULES, KINDS):
            rates = BlockRates(record, slopes, rule, kind)
            found["CUSUM on block rates"] += _cusum(rates)
            found["EWMA on block rates"] += _ewma(rates)
            if "ADWIN (river)" in found:
                found["Page-Hinkley (river)"] += _page_hinkley(rates)
                found["ADWIN (river)"] += _adwin(rates)
        if "KernelCPD (ruptures), hindsight" in found:
            found["KernelCPD (ruptures), hindsight"] = list(_kernel(record, slopes))
        for method, some in found.items():
            hours = np.concatenate(some)
            answers[method] += [None if h != h else float(f"{h:.6g}") for h in hours.tolist()]
    for method in methods:
        assert len(answers[method]) == len(SETTINGS[method]), method
    return simulate(spec), answers


def _by_hand(record: Record, slopes: Slopes) -> Iterator[Array]:
    """Rate over the last stretch, held against the least so far: what people do by hand.

    With a margin: the rate less so many standard errors against the least of the rates and as many more.
    """
    clock = record.clock_h
    first = float(clock[min(3 * FEWEST_SCANS, clock.size - 1)])
    looks = np.array([])
    if 0.0 < first < clock[-1]:
        looks = np.exp(np.arange(np.log(first), np.log(clock[-1]), LOOK))
    high = np.searchsorted(clock, looks, side="right")
    at_h = record.t_h[high - 1]
    for window in WINDOWS:
        low = np.searchsorted(clock, looks * (1.0 - window), side="left")
        rate, error, _, _ = slopes.over(low, high)
        rate = np.where(high - low >= FEWEST_SCANS, rate, np.nan)
        sure = rate > 3.0 * error  # a least rate of noise about zero would make any ratio
        for stood, margin in itertools.product(STOOD, MARGINS):
            least, when = _least_so_far(np.where(sure, rate + margin * error, np.inf), looks)
            ready = (when <= looks * (1.0 - stood)) & (at_h >= record.wait_h)
            with np.errstate(invalid="ignore"):
                over = (rate - margin * error)[None, :] > np.outer(RATIOS, least)
            over &= ready[None, :]
            begun = np.maximum.accumulate(np.where(over, -np.inf, looks[None, :]), axis=1)
            held = looks[None, :] * (1.0 - np.asarray(PERSIST)[:, None, None]) >= begun[None, :, :]
            yield _first_hours((over[None, :, :] & held).transpose(1, 0, 2).reshape(-1, looks.size), at_h)


def _least_so_far(rate: Array, when: Array) -> tuple[Array, Array]:
    """Return the least of all rates up to each one and when it was; infinite before there is any."""
    least = np.minimum.accumulate(rate) if rate.size else rate
    fresh = (rate == least) & np.isfinite(rate)
    at = np.maximum.accumulate(np.where(fresh, when, -np.inf)) if rate.size else when
    return least, np.where(np.isfinite(least), at, np.inf)


def _first_hours(alarm: Flags, at_h: Array) -> Array:
    """Return the hour of the first alarm of each row, NaN where there is none."""
    if at_h.size == 0:
        return np.full(alarm.shape[0], np.nan)
    return np.where(alarm.any(axis=1), at_h[alarm.argmax(axis=1)], np.nan)


class BlockRates:
    """Rates of closed blocks and what charts need: reference, standardised rates, permission to alarm.

    ``z``: (rate - reference) over the scatter, the median absolute difference of neighbouring rates of
    late. The reference is that mean of ``RECENT`` neighbouring rates before this one whose upper limit
    (two standard errors) is least, of those clearly above zero (three): blocks grow, and the plain least
    would be an early one of nothing but noise. ``z`` is zero until there is one.
    ``fresh``: the reference is new at this block. ``may[i, j]``: the mean of the last ``RECENT`` rates
    exceeds the reference by RISES[i], which has stood for STOOD_BLOCKS[j] of the elapsed time.
    """

    def __init__(self, record: Record, slopes: Slopes, rule: tuple[str, float], kind: str) -> None:
        edges = np.asarray(_edges(record.clock_h, rule))
        rate, error, mid_h, mean = slopes.over(edges[:-1], edges[1:])
        last = edges[1:] - 1
        if kind == "means":
            each = slopes.floor**2 / np.diff(edges)
            with np.errstate(all="ignore"):
                rate, last = np.diff(mean) / np.diff(mid_h), last[1:]
                error = np.sqrt(each[1:] + each[:-1]) / np.diff(mid_h)
        good = np.isfinite(rate)
        rate, last, least_error = rate[good], last[good], 0.5 * error[good]
        first = max(RECENT, SCATTER // 3) + 1
        n = max(rate.size - first, 0)
        self.rate, self.at_h = rate[first:], record.t_h[last[first:]]
        self.z, self.fresh = np.zeros(n), np.zeros(n, dtype=bool)
        self.reference = np.zeros(n)
        self.scatter = np.ones(n)
        self.may = np.zeros((len(RISES), len(STOOD_BLOCKS), n), dtype=bool)
        if n == 0:
            return
        clock = record.clock_h[last]
        sums = np.concatenate([[0.0], np.cumsum(rate)])
        recent = np.full(rate.size, np.inf)
        recent[RECENT - 1 :] = (sums[RECENT:] - sums[:-RECENT]) / RECENT
        steps = np.abs(np.concatenate([np.full(SCATTER, np.nan), np.diff(rate)]))
        spread = np.full(rate.size, np.inf)  # of the differences up to and with each rate
        spread[first - 1 :] = np.nanmedian(
            np.lib.stride_tricks.sliding_window_view(steps, SCATTER)[first - 1 :], axis=1
        )
        spread = np.maximum(
            1.4826 / 2.0**0.5 * spread, least_error
        )  # neighbours may differ by no count at all
        error = spread / RECENT**0.5  # of a mean of so many
        with np.errstate(invalid="ignore"):
            sure = recent > 3.0 * error
        _, when = _least_so_far(np.where(sure, recent + 2.0 * error, np.inf), clock)
        before, now = slice(first - 1, -1), slice(first, None)
        known = np.isfinite(when[before])
        place = np.searchsorted(clock, np.where(known, when[before], clock[0]))
        self.reference = np.where(known, recent[place], self.rate)
        self.scatter = np.maximum(spread[before], 1e-3 * np.abs(self.reference) + 1e-30)
        self.z = (self.rate - self.reference) / self.scatter
        self.fresh = when[before] == clock[before]
        for (i, rise), (j, stood) in itertools.product(enumerate(RISES), enumerate(STOOD_BLOCKS)):
            bar = self.reference + rise * np.abs(self.reference)
            ready = (when[before] <= clock[now] * (1.0 - stood)) & (self.at_h >= record.wait_h)
            self.may[i, j] = (recent[now] > bar) & ready & known

    def slack(self, rise: float) -> Array:
        """Return the standardised rates against a reference that is higher by ``rise``."""
        return np.asarray(self.z - rise * np.abs(self.reference) / self.scatter)

    def first_hours(self, statistic: Array, thresholds: Array, may: Flags) -> Array:
        """Return the first hour at which ``statistic`` is above each threshold and an alarm may be given."""
        if self.at_h.size == 0:
            return np.full(thresholds.size, np.nan)
        best = np.maximum.accumulate(np.where(may, statistic, -np.inf))
        at = np.searchsorted(best, thresholds, side="right")
        return np.where(at < best.size, self.at_h[np.minimum(at, best.size - 1)], np.nan)


def _edges(clock: Array, rule: tuple[str, float]) -> list[int]:
    """Return where blocks of scans begin, and the end of the last closed one."""
    kind, size = rule
    if kind == "scans":
        return list(range(0, clock.size + 1, int(size)))
    edges = [0]
    while True:
        begin_h = clock[min(edges[-1], clock.size - 1)]
        end = int(np.searchsorted(clock, begin_h / (1.0 - size), side="left"))
        end = max(end, edges[-1] + BLOCK_SCANS)
        if end >= clock.size:
            return edges
        edges.append(end)


def _cusum(rates: BlockRates) -> list[Array]:
    h = np.asarray(CUSUM_H)
    out = []
    for rise in RISES:
        charts = [cusum(rates.slack(rise), k) for k in CUSUM_K]
        out += [rates.first_hours(s, h, rates.may[0, j]) for j in range(len(STOOD_BLOCKS)) for s in charts]
    return out


def _ewma(rates: BlockRates) -> list[Array]:
    limits = np.asarray(EWMA_LIMIT)
    out = []
    for rise in RISES:
        z = rates.slack(rise)
        charts = [ewma(z, w) / float(ewma_spread(w)) if z.size else z for w in EWMA_WEIGHT]
        out += [
            rates.first_hours(s, limits, rates.may[0, j]) for j in range(len(STOOD_BLOCKS)) for s in charts
        ]
    return out


def page_hinkley_path(z: Array, fresh: Flags, delta: float) -> Array:
    """Return river's Page-Hinkley statistic after each value; a new detector at each fresh reference.

    Read from inside the detector, so that one pass serves all thresholds; a test holds it against the
    detector's own alarms.
    """
    from river.drift import PageHinkley

    out = np.zeros(z.size)
    one = PageHinkley(min_instances=5, delta=delta, threshold=float("inf"), mode="up")
    for i, (value, new) in enumerate(zip(z.tolist(), fresh.tolist(), strict=True)):
        if new:
            one = PageHinkley(min_instances=5, delta=delta, threshold=float("inf"), mode="up")
        one.update(value)
        if one._x_mean.n >= one.min_instances:
            out[i] = one._sum_increase - one._min_increase
    return out


def _page_hinkley(rates: BlockRates) -> list[Array]:
    thresholds = np.asarray(PH_THRESHOLD)
    paths = [page_hinkley_path(rates.z, rates.fresh, delta) for delta in PH_DELTA]
    return [
        rates.first_hours(s, thresholds, rates.may[i, j])
        for i, j in itertools.product(range(len(RISES)), range(len(STOOD_BLOCKS)))
        for s in paths
    ]


def adwin_alarms(z: Array, delta: float) -> Flags:
    """Return where river's ADWIN drops the old part of its window because the mean has risen."""
    from river.drift import ADWIN

    one = ADWIN(delta=delta, clock=1)
    out = np.zeros(z.size, dtype=bool)
    total, width = 0.0, 0  # of its window: asking it at every value would take most of the time
    for i, value in enumerate(z.tolist()):
        one.update(value)
        total, width = total + value, width + 1
        if one.drift_detected:
            out[i] = one.estimation > total / width
            total, width = 0.0, 0  # it begins anew with the next value
    return out


def _adwin(rates: BlockRates) -> list[Array]:
    alarms = np.array([adwin_alarms(rates.z * s, delta) for delta in ADWIN_DELTA for s in ADWIN_SCALE])
    return [
        _first_hours(alarms & rates.may[i, j][None, :], rates.at_h)
        for i, j in itertools.product(range(len(RISES)), range(len(STOOD_BLOCKS)))
    ]


def _kernel(record: Record, slopes: Slopes) -> Iterator[Array]:
    """The first change point after which the rate is higher, the whole record known."""
    from ruptures import KernelCPD

    for blocks in KERNEL_BLOCKS:
        edges = np.searchsorted(record.clock_h, np.linspace(0.0, record.clock_h[-1], blocks + 1))
        edges = np.unique(edges)
        edges = edges[np.concatenate([[True], np.diff(edges) >= 3])]
        rate, error, _, _ = slopes.over(edges[:-1], edges[1:])
        good = np.isfinite(rate)
        begin_h, rate, error = record.t_h[edges[:-1]][good], rate[good], error[good]
        for kernel in KERNELS:
            answers = np.full((len(PENALTIES[kernel]), len(KERNEL_RATIOS)), np.nan)
            if rate.size >= 10:
                scatter = 1.4826 / 2.0**0.5 * float(np.median(np.abs(np.diff(rate))))
                scatter = max(scatter, 0.5 * float(np.median(error)), 1e-30)
                found = KernelCPD(kernel=kernel, min_size=2).fit(rate[:, None] / scatter)
                for i, penalty in enumerate(PENALTIES[kernel]):
                    cuts = [0, *found.predict(pen=penalty)]
                    means = np.array([rate[a:b].mean() for a, b in itertools.pairwise(cuts)])
                    for j, ratio in enumerate(KERNEL_RATIOS):
                        bar = means[:-1] + (ratio - 1.0) * np.abs(means[:-1])
                        up = np.flatnonzero((means[1:] > bar) & (begin_h[cuts[1:-1]] >= record.wait_h))
                        if up.size:
                            answers[i, j] = begin_h[cuts[1 + int(up[0])]]
            yield answers.ravel()
