"""Pictures: what the detector said on simulated rigs and on measured recordings, beside the truth.

    python tests/bench/detection/pictures.py --seed 77 --rigs 10 --out DIR [--first 0] [--recordings DIR]

One PNG a test. Above: strain of each side and the true one, stages as they were said, steps. Middle: the
rate. The grey band is the rate now with its 90 % interval as it was told at each moment, the dark line what
the whole record says in hindsight, the pale line the truth. Below: temperatures, where there are any. Truth
is broken lines, what the detector said solid ones. Measured recordings have hindsight labels in place of
truth: least-squares slope over +-4 % of the duration, ends (2 %) left out; they are skipped with a notice
where they are absent. Needs matplotlib.
"""

from __future__ import annotations

import argparse
import csv
import os
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Final

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")  # small matrices: threads only get in each other's way

import numpy as np  # noqa: E402
from campaign import rules_of  # noqa: E402
from matplotlib.axes import Axes  # noqa: E402
from matplotlib.backends.backend_agg import FigureCanvasAgg  # noqa: E402
from matplotlib.figure import Figure  # noqa: E402
from matplotlib.lines import Line2D  # noqa: E402
from matplotlib.patches import Patch  # noqa: E402

from daq.core import follow  # noqa: E402
from daq.core.block import Block, Conclusion  # noqa: E402
from daq.core.rules import ChannelRules, Role, Specimen, TestRules  # noqa: E402
from daq.prove.score import block_of, limit_of  # noqa: E402
from simulator import population  # noqa: E402
from simulator.rig import Run, simulate  # noqa: E402

MOMENTS: Final = 240
POINTS: Final = 5000
DARK, WARM, COOL, PALE = "#1b1b2f", "#c1440e", "#2a6f97", "#e9b872"
STAGE_COLOURS: Final = {
    "primary": "#f2f2f2", "inverse primary": "#c9b79c", "secondary": "#bcd4e6", "tertiary": "#d98c6a",
}  # fmt: skip
MEASURED: Final = ("C-78", "C-82", "C-81", "C-94")
STRESS_MPA: Final = {"C-78": 230.0, "C-82": 200.0, "C-81": 170.0, "C-94": 140.0}


@dataclass(frozen=True)
class Known:
    """What is true, in test hours and m/m; None where it is not so or not known."""

    t_h: np.ndarray
    strain: np.ndarray
    rate: np.ndarray
    least_h: float | None = None
    least_rate: float | None = None
    first_rise_h: float | None = None
    offset_h: float | None = None
    best_h: float | None = None
    hindsight: bool = False
    steps_h: tuple[float, ...] = ()


@dataclass(frozen=True)
class Told:
    """What the follower said, and the rate now at each moment (hours, rate, low, high)."""

    said: list[Conclusion]
    live: np.ndarray
    t_h: np.ndarray
    rate: np.ndarray
    hours: dict[int, float] = field(default_factory=dict)


def listen(block: Block, rules: TestRules, n: int, cue: str) -> Told:
    """Run the follower over the first ``n`` scans, asking for the rate now at some 240 moments."""
    t = block.t_s[:n]
    asked = np.unique(np.searchsorted(t, np.linspace(0.0, t.max(), MOMENTS + 1)[1:], side="right"))
    s, said, live, lo = follow.begin(rules), [], [], 0
    for hi in [*asked[asked < n].tolist(), n]:
        s, some = follow.follow(s, rules, block.cut(lo, hi))
        said += some
        lo = hi
        now = follow.status(s, rules)
        if now["rate_per_h"] is not None:
            live.append(
                (t[hi - 1] / 3600.0, now["rate_per_h"], now["rate_low_per_h"], now["rate_high_per_h"])
            )
    s, some = follow.tell(s, rules, cue, int(block.tick[n - 1]), float(t[n - 1]), n - 1)
    said += some
    when, _, rate, _, _ = follow.curve(s)
    hours = {c.scan: float(t[min(c.scan, n - 1)]) / 3600.0 for c in said}
    return Told(said, np.array(live).reshape(-1, 4), when, rate, hours)


def rig(seed: int, index: int) -> tuple[str, Block, TestRules, Known, Told]:
    """Simulate one rig and listen to it."""
    run: Run = simulate(population.draw(seed, index))
    rules, truth = rules_of(run), run.truth
    zero = {c.side or "A": c.zero + run.spec.loading_strain for c in run.spec.transducers}
    block = block_of(run)
    block = replace(
        block,
        strain_a=block.strain_a - zero.get("A", 0.0),
        strain_b=block.strain_b - zero.get("B", 0.0),
    )
    n = int(np.searchsorted(block.t_s, truth.end_h * 3600.0, side="right"))
    first = truth.first_rise_h if truth.rises else None
    best = limit_of(run) if truth.rises else None
    if best is not None and first is not None and best < first:
        best = None  # a bound met within the incubation says nothing about tertiary creep
    known = Known(
        truth.t_h, truth.strain, truth.rate_per_h, truth.minimum_h, truth.minimum_rate_per_h, first,
        truth.offset_0p2_h, best,
        steps_h=tuple(e.at_h for e in truth.events if e.kind in ("slip", "rezero")),
    )  # fmt: skip
    told = listen(block, rules, n, "ended" if truth.rupture_h is None else "ruptured")
    expected = (
        "no life told" if rules.expected_rupture_h is None else f"told {rules.expected_rupture_h:.0f} h"
    )
    q = "no Q" if rules.activation_energy_j_per_mol is None else "Q told"
    title = f"{truth.kind}: rig {seed}/{index} ({n} scans, {expected}, {q})"
    return title, block.cut(0, n), rules, known, told


def recording(path: Path) -> tuple[str, Block, TestRules, Known, Told]:
    """Read a measured recording (time_s, strain_pct, three thermocouples) and listen to it."""
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.reader(file))
    data = np.array([[float(v) if v else np.nan for v in row] for row in rows[1:]])
    t, e = data[:, 0] - data[0, 0], data[:, 1] / 100.0
    n = t.size
    none, values = np.full(n, np.nan), np.zeros((n, 0))
    block = Block(
        0, np.round(t * 1e4).astype(np.int64), t, values, values.astype(np.uint8), e, none,
        np.mean(data[:, 2:5], axis=1), none, none,
    )  # fmt: skip
    channels = (ChannelRules("strain", Role.STRAIN, "A"),)
    rules = TestRules(
        "measured", "H1", "H1", Specimen(path.stem), channels,
        stress_pa=STRESS_MPA.get(path.stem, 200.0) * 1e6, set_point_c=980.0,
    )  # fmt: skip
    told = listen(block, rules, n, "ended" if path.stem == "C-94" else "ruptured")
    return f"measured: {path.stem} ({n} scans, nothing told)", block, rules, hindsight(t / 3600.0, e), told


def hindsight(t: np.ndarray, e: np.ndarray) -> Known:
    """Return labels from the whole record: least windowed slope, and where its tangent is left for good."""
    end = float(t[-1])
    at = np.linspace(0.02 * end, 0.98 * end, 400)
    slopes, levels = np.empty(at.size), np.empty(at.size)
    for i, x in enumerate(at):
        inside = np.abs(t - x) <= 0.04 * end
        slopes[i], levels[i] = np.polyfit(t[inside] - x, e[inside], 1)
    k = int(np.argmin(slopes))
    away = levels - levels[k] - slopes[k] * (at - at[k])
    below = np.flatnonzero(away <= 0.002)
    last = int(below[-1]) + 1
    offset = float(at[last]) if last < at.size else None
    return Known(at, levels, slopes, float(at[k]), float(slopes[k]), None, offset, None, True)


# --- drawing ----------------------------------------------------------------------------


def draw(path: Path, title: str, block: Block, known: Known, told: Told) -> None:
    """Draw one test."""
    t = block.t_s / 3600.0
    temps = {"specimen": block.specimen_c, "room": block.room_c}
    temps = {name: v for name, v in temps.items() if np.isfinite(v).any()}
    figure = Figure(figsize=(12, 10 if temps else 8), layout="constrained")
    FigureCanvasAgg(figure)
    grid = figure.subplots(3 if temps else 2, 1, sharex=True, height_ratios=[3, 4, 1.6] if temps else [3, 4])
    axes: Sequence[Axes] = list(grid)
    figure.suptitle(title, fontsize=12, x=0.01, ha="left")
    _strain(axes[0], t, block, known, told)
    _rate(axes[1], known, told)
    if temps:
        _temperatures(axes[2], t, temps)
    for ax in axes[:2]:
        _marks(ax, known, told)
    axes[-1].set_xlabel("test time (h)")
    axes[0].set_xlim(0.0, float(t.max()) * 1.005)
    for ax in axes:
        ax.grid(True, color="#dddddd", linewidth=0.5)
        ax.set_axisbelow(True)
    axes[1].legend(
        handles=_legend(known, told), loc="upper center", ncols=4, fontsize=8, framealpha=0.9,
        bbox_to_anchor=(0.5, -0.06 if not temps else -0.02),
    )  # fmt: skip
    figure.savefig(path, dpi=90)


def _strain(ax: Axes, t: np.ndarray, block: Block, known: Known, told: Told) -> None:
    every = max(1, t.size // POINTS)
    for v, colour, name in ((block.strain_a, COOL, "side A"), (block.strain_b, WARM, "side B")):
        if np.isfinite(v).any():
            ax.plot(t[::every], 100 * v[::every], ".", ms=1.5, color=colour, label=name)
    name = "windowed, in hindsight" if known.hindsight else "true"
    ax.plot(known.t_h, 100 * known.strain, "--", color=DARK, lw=1.2, label=name)
    low, high = 100 * float(np.min(known.strain)), 100 * float(np.max(known.strain))
    seen = np.concatenate([v[np.isfinite(v)] for v in (block.strain_a, block.strain_b)]) * 100
    low = min(low, float(np.quantile(seen, 0.005)))
    high = max(high, float(np.quantile(seen, 0.995)))
    room = 0.08 * (high - low)
    ax.set_ylim(low - 1.5 * room, high + 2.0 * room)
    steps = [c for c in told.said if c.kind == "step"]
    ax.plot(
        [c.fields["time_h"] for c in steps], [low - 0.6 * room] * len(steps), "^", color=DARK, ms=7,
        label=f"steps found ({len(steps)})",
    )  # fmt: skip
    if not known.hindsight:
        ax.plot(
            known.steps_h, [low - 1.1 * room] * len(known.steps_h), "x", color=DARK, ms=6,
            label=f"steps injected ({len(known.steps_h)})",
        )  # fmt: skip
    for c, until in _stages(told, float(t.max())):
        begin = told.hours[c.scan]
        ax.axvspan(begin, until, ymin=0.93, ymax=1.0, color=STAGE_COLOURS.get(c.key, "#ffffff"), lw=0)
        if until - begin > 0.06 * t.max():
            ax.text(begin, 0.965, f" {c.key}", transform=ax.get_xaxis_transform(), va="center", fontsize=8)
    ax.set_ylabel("strain (%)")
    ax.legend(loc="center left", fontsize=8, framealpha=0.9)


def _stages(told: Told, end_h: float) -> list[tuple[Conclusion, float]]:
    stages = [c for c in told.said if c.kind == "stage"]
    ends = [told.hours[c.scan] for c in stages[1:]] + [end_h]
    return [(c, e) for c, e in zip(stages, ends, strict=True) if c.key not in ("ruptured", "ended")]


def _rate(ax: Axes, known: Known, told: Told) -> None:
    shown = known.rate[(known.t_h > 0.01 * known.t_h[-1]) & (known.t_h < 0.99 * known.t_h[-1])]
    shown = shown[shown > 0]
    bottom, top = 100 * float(np.quantile(shown, 0.02)) / 2.5, 100 * float(shown.max()) * 2.0
    ax.set_yscale("log")
    if told.live.size:
        x, rate, low, high = told.live.T
        floor = bottom / 1e3
        ax.fill_between(x, np.maximum(100 * low, floor), np.maximum(100 * high, floor), color="#c8c8c8", lw=0)
        ax.plot(x, np.where(rate > 0, 100 * rate, np.nan), color="#7d7d7d", lw=1.0)
    ax.plot(known.t_h, np.where(known.rate > 0, 100 * known.rate, np.nan), color=PALE, lw=3.0)
    ax.plot(told.t_h, np.where(told.rate > 0, 100 * told.rate, np.nan), color=COOL, lw=1.1)
    if known.least_h is not None and known.least_rate is not None and known.least_rate > 0:
        ax.plot([known.least_h], [100 * known.least_rate], "o", mfc="none", mec=DARK, ms=9, mew=1.5)
    least = [c.fields for c in told.said if c.kind == "minimum_rate"]
    tertiary = [c.fields for c in told.said if c.key == "tertiary"]
    marks = [(m, "s") for m in least[-1:]] + [(m, "D") for m in least[:1] if tertiary]
    for m, mark in marks:
        value = 100 * m["rate_per_h"]
        down, up = value - 100 * max(m["low_per_h"], 1e-12), 100 * m["high_per_h"] - value
        ax.errorbar(
            [m["time_h"]], [value], yerr=[[max(down, 0.0)], [max(up, 0.0)]], fmt=mark, color=DARK, ms=5,
            capsize=3,
        )  # fmt: skip
    if tertiary and tertiary[-1]["onset_low_h"] is not None and least:
        at = 100 * least[0]["rate_per_h"] * 0.8
        ax.plot(
            [tertiary[-1]["onset_low_h"], tertiary[-1]["onset_high_h"]], [at, at], "-|", color=DARK, lw=2.5,
            ms=10,
        )  # fmt: skip
    ax.set_ylim(bottom, top)
    ax.set_ylabel("rate (%/h)")


def _temperatures(ax: Axes, t: np.ndarray, temps: Mapping[str, np.ndarray]) -> None:
    every = max(1, t.size // POINTS)
    handles: list[Line2D] = []
    on = ax
    for i, (name, v) in enumerate(temps.items()):
        if i == 1:
            on = ax.twinx()  # type: ignore[assignment]
        handles += on.plot(t[::every], v[::every], lw=0.6, color=(WARM, COOL)[i], label=f"{name}")
        low, high = np.nanquantile(v, [0.002, 0.998])
        on.set_ylim(low - 0.6, high + 0.6)
        on.set_ylabel(f"{name} (°C)")
    ax.legend(handles=handles, loc="upper right", fontsize=8)


def _marks(ax: Axes, known: Known, told: Told) -> None:
    for when, style in _truths(known):
        ax.axvline(when, color=DARK, lw=1.2, ls=style)
    for c in told.said:
        if c.kind == "stage" and c.key == "tertiary":
            ax.axvline(told.hours[c.scan], color=WARM, lw=2.0)
        elif c.kind == "stage" and c.fields["withdraws"] and c.fields["from"] == "tertiary":
            ax.axvline(told.hours[c.scan], color=WARM, lw=2.0, ls=(0, (4, 2)))


FIRST, OFFSET, BEST = ":", "--", "-."


def _truths(known: Known) -> list[tuple[float, Any]]:
    times = (known.first_rise_h, FIRST), (known.offset_h, OFFSET), (known.best_h, BEST)
    return [(when, style) for when, style in times if when is not None]


def _legend(known: Known, told: Told) -> list[Line2D | Patch]:
    by = "by hindsight" if known.hindsight else "true"
    out: list[Line2D | Patch] = [
        Line2D([], [], color=PALE, lw=3, label=f"rate {by}"),
        Line2D([], [], color=COOL, lw=1.1, label="rate from the whole record"),
        Line2D([], [], color="#7d7d7d", label="rate now, as told then"),
        Patch(color="#c8c8c8", label="its 90 % interval"),
        Line2D([], [], ls="", marker="o", mfc="none", mec=DARK, label=f"least rate {by}"),
        Line2D([], [], ls="", marker="s", color=DARK, label="least rate, told at the end"),
    ]
    if any(c.key == "tertiary" for c in told.said):
        out += [
            Line2D([], [], ls="", marker="D", color=DARK, label="least rate, told at detection"),
            Line2D([], [], color=DARK, lw=2.5, label="onset, 90 % interval"),
            Line2D([], [], color=WARM, lw=2, label="tertiary said"),
        ]
    names = {FIRST: "first rise", OFFSET: "0.2 % offset", BEST: "best possible detection"}
    for when, style in _truths(known):
        out.append(Line2D([], [], color=DARK, ls=style, label=f"{names[style]} {by}, {when:.4g} h"))
    if any(c.kind == "stage" and c.fields["withdraws"] and c.fields["from"] == "tertiary" for c in told.said):
        out.append(Line2D([], [], color=WARM, lw=2, ls=(0, (4, 2)), label="tertiary withdrawn"))
    return out


def words(title: str, known: Known, told: Told) -> str:
    """Return what the picture shows, as text."""

    def show(v: float | None) -> str:
        return "-" if v is None else f"{v:.4g}"

    lines = [
        title,
        f"  truth: least {show(known.least_rate)} /h at {show(known.least_h)} h, first rise "
        f"{show(known.first_rise_h)}, best {show(known.best_h)}, offset {show(known.offset_h)}, "
        f"end {known.t_h[-1]:.4g}",
    ]
    for c in told.said:
        f = c.fields
        if c.kind == "stage":
            span = f"{show(f['onset_low_h'])}..{show(f['onset_high_h'])}"
            lines.append(
                f"  {told.hours[c.scan]:9.2f} h {c.key}: onset {show(f['onset_h'])} ({span}) {f['why']}"
            )
        elif c.kind == "minimum_rate":
            lines.append(
                f"  {told.hours[c.scan]:9.2f} h least {f['rate_per_h']:.4g} "
                f"({f['low_per_h']:.4g}..{f['high_per_h']:.4g}) at {f['time_h']:.4g} h, corrected "
                f"{show(f['corrected_rate_per_h'])}"
            )
        elif c.kind == "onset":
            lines.append(f"  {told.hours[c.scan]:9.2f} h onset {c.key} {show(f['time_h'])}")
        elif c.kind == "step":
            lines.append(f"  {told.hours[c.scan]:9.2f} h step at {f['time_h']:.4g} h of {f['size']:.2e}")
    return "\n".join(lines)


def main() -> int:
    ask = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    ask.add_argument("--seed", type=int, default=77)
    ask.add_argument("--rigs", type=int, default=10)
    ask.add_argument("--first", type=int, default=0)
    ask.add_argument("--out", type=Path, required=True)
    ask.add_argument(
        "--recordings", type=Path, help="folder of measured recordings (default: ../shared/data/cmsx6)"
    )
    told = ask.parse_args()
    told.out.mkdir(parents=True, exist_ok=True)
    for index in range(told.first, told.first + told.rigs):
        title, block, _, known, heard = rig(told.seed, index)
        draw(told.out / f"rig-{told.seed}-{index:03d}.png", title, block, known, heard)
        print(words(title, known, heard), flush=True)
    folder = told.recordings or Path(__file__).resolve().parents[4] / "shared" / "data" / "cmsx6"
    for name in MEASURED:
        path = folder / f"{name}.csv"
        if not path.is_file():
            print(f"notice: {path.name} is not there, skipped")
            continue
        title, block, _, known, heard = recording(path)
        draw(told.out / f"measured-{name}.png", title, block, known, heard)
        print(words(title, known, heard), flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
