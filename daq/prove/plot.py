"""The plot of a campaign: false share against delay, one point a level of evidence.

Drawn with matplotlib's objects alone: no window, no global state. The extra ``plots`` brings it.
"""

from __future__ import annotations

import importlib.util
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Final

MEDIAN_COLOUR: Final = "#1f5f8b"
HIGH_COLOUR: Final = "#c06014"
"""A blue and an orange that stay apart for every kind of colour vision, and in grey."""
NEAR: Final = 0.012
"""Levels closer than this share of the axis share a mark: their labels would lie over each other."""


def available() -> bool:
    """Say whether the package that draws is there."""
    return importlib.util.find_spec("matplotlib") is not None


def draw(figures: Mapping[str, Any], title: str, own_share: float, path: Path) -> None:
    """Write the plot to ``path`` (PNG).

    Delays over the best possible one go to the right (median, and what 90 % of rigs keep within), the share
    of false detections upwards with its exact 95 % interval. A level without false ones stands at the bottom.
    """
    figure_of: Any = importlib.import_module("matplotlib.figure").Figure
    canvas_of: Any = importlib.import_module("matplotlib.backends.backend_agg").FigureCanvasAgg
    ticker: Any = importlib.import_module("matplotlib.ticker")
    floor = 100.0 * 0.4 / max(figures["rigs"], 1)  # zero has no place on a logarithmic axis: below one rig
    figure = figure_of(figsize=(8.0, 5.2), dpi=150)
    canvas_of(figure)
    axes = figure.add_axes((0.1, 0.11, 0.86, 0.8))
    axes.set_yscale("log")
    told = [x["delay_over_best"][k] for x in figures["levels"] for k in ("median", "high_90")]
    near = NEAR * (max((d for d in told if d is not None), default=1.0) - 0.95)
    for key, colour, marker, name, bottom in (
        ("median", MEDIAN_COLOUR, "o", "median", floor),
        ("high_90", HIGH_COLOUR, "s", "90 % of rigs within", 0.75 * floor),
    ):
        _curve(axes, figures["levels"], key, colour, marker, bottom, own_share, near)
        axes.plot([], [], marker, color=colour, label=name)
    axes.axvline(1.0, color="0.5", lw=0.8, ls="--")
    axes.set_ylim(bottom=0.6 * floor)
    axes.set_xlim(left=min(0.95, axes.get_xlim()[0]))
    axes.margins(x=0.08)
    axes.set_xlabel("delay over the best possible one of a method false in 1 of 200 (dashed: the best)")
    axes.set_ylabel("tests with a false tertiary detection [%], 95 % exact")
    axes.set_title(title, fontsize=10)
    axes.yaxis.set_major_locator(ticker.LogLocator(subs=(1.0, 2.0, 5.0)))
    axes.yaxis.set_major_formatter(lambda v, _: f"{v:g}" if v > floor else "")
    axes.yaxis.set_minor_formatter(ticker.NullFormatter())
    axes.grid(True, which="major", color="0.92")
    axes.annotate("0", (0.0, floor), xycoords=("axes fraction", "data"), xytext=(-14, -3),
                  textcoords="offset points")  # fmt: skip
    heading = "numbers: false_share in the lab file\nlarge: in force; hollow, at the bottom: none false"
    axes.legend(title=heading, fontsize=9, title_fontsize=9, loc="upper right", framealpha=1.0)
    figure.savefig(path)


def _curve(
    axes: Any,
    each: Sequence[Mapping[str, Any]],
    key: str,
    colour: str,
    marker: str,
    floor: float,
    own: float,
    near: float,
) -> None:
    """One curve: levels at nearly the same place share a mark and a label."""
    places: dict[tuple[float, float], list[Mapping[str, Any]]] = {}
    for x in each:
        delay, y = x["delay_over_best"][key], max(100.0 * x["false"]["share"], floor)
        if delay is not None:
            place = next(((d, h) for d, h in places if h == y and abs(d - delay) < near), (delay, y))
            places.setdefault(place, []).append(x)
    axes.plot([d for d, _ in places], [y for _, y in places], "-", color=colour, lw=0.8, zorder=2)
    for (delay, y), levels in places.items():
        f = levels[0]["false"]
        ours = any(x["false_share"] == own for x in levels)
        ends = [max(100.0 * f["low_95"], floor), 100.0 * f["high_95"]]
        axes.plot([delay, delay], ends, color=colour, lw=1.0, alpha=0.35, zorder=1)
        fill = colour if f["count"] else "white"
        axes.plot(delay, y, marker, color=colour, ms=10 if ours else 6, mew=1.5, mfc=fill, zorder=3)
        text = ", ".join(f"{x['false_share']:g}" for x in levels)
        axes.annotate(
            text, (delay, y), xytext=(5, 6), textcoords="offset points", rotation=55, rotation_mode="anchor",
            fontsize=8, color=colour, fontweight="bold" if ours else "normal", zorder=4,
        )  # fmt: skip
