"""A campaign's figures as lines of text for a terminal of 80 columns."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any


def lines(figures: Mapping[str, Any], own_share: float | None = None) -> list[str]:
    """Return the table; ``own_share`` is the ``false_share`` in force, marked among the levels."""
    least = figures["least_rate"]
    must, offset = figures["must_detect"], figures["after_offset"]
    out = [
        f"{'false detections':20}{_share(figures['false'], 'rigs')}",
        f"{'missed / late':20}{figures['missed']} / {offset} of {must} that broke"
        " (late: after the 0.2 % offset)",
        f"{'delay':20}{'median':>10}{'90 % within':>13}",
        _spread("  hours", figures["delay_h"], "{:.3g}"),
        _spread("  share of life", figures["delay_share_of_life"], "{:.1%}"),
        _spread("  least rate..offset", figures["delay_minimum_to_offset"], "{:.2f}"),
        _spread("  over best possible", figures["delay_over_best"], "{:.2f}"),
        _spread("least rate: error", least["error"], "{:.2%}"),
        _spread("  over best s.e.", least["error_over_best_standard_error"], "{:.2f}"),
        _spread("  and bending", least["error_over_best_rms"], "{:.2f}"),
        f"{'90 % intervals hold':20}least rate {_holds(least['interval_holds'])},"
        f" {_holds(least['interval_holds_allowing'])} with thermocouple error",
        f"{'':20}allowed for; onset {_holds(figures['onset_interval_holds'])}",
    ]
    if figures["levels"]:
        out += ["", *levels(figures["levels"], own_share)]
    return out


def levels(each: Sequence[Mapping[str, Any]], own_share: float | None) -> list[str]:
    """Return one line a level of evidence, under a heading that names the key of the lab file."""
    out = [f"  {'false_share':13}{'false, 95 % exact':28}{'delay over best possible':>25}{'missed':>8}"]
    for x in each:
        mark = "> " if x["false_share"] == own_share else "  "
        f, d = x["false"], x["delay_over_best"]
        seen = f"{f['count']} = {f['share']:.2%} ({f['low_95']:.2%} .. {f['high_95']:.2%})"
        spread = f"{_value(d['median'], '{:.2f}')}, 90 % {_value(d['high_90'], '{:.2f}')}"
        out.append(f"{mark}{x['false_share']:<13g}{seen:28}{spread:>25}{x['missed']:>8}")
    return out


def _share(x: Mapping[str, Any], of: str) -> str:
    if not x["of"]:
        return f"none of 0 {of}"
    return (
        f"{x['count']} of {x['of']} {of} = {x['share']:.2%}"
        f"  (95 % exact {x['low_95']:.2%} .. {x['high_95']:.2%})"
    )


def _holds(x: Mapping[str, Any]) -> str:
    return f"{x['share']:.0%} of {x['of']}" if x["of"] else "-"


def _spread(name: str, x: Mapping[str, Any], form: str) -> str:
    return f"{name:20}{_value(x['median'], form):>10}{_value(x['high_90'], form):>13}   of {x['of']} rigs"


def _value(x: float | None, form: str) -> str:
    return "-" if x is None else form.format(x)
