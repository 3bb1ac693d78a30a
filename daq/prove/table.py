"""Figures of a campaign, from its rows: the same rows, the same figures, in whatever order they came.

Rows are those of ``score.score``. Figures are plain JSON values (``schemas/prove_table.json``), None where no
rig could tell or where the figure is infinite (more rigs undetected than the quantile leaves out).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any, Final

from daq.prove.exact import clopper_pearson, quantile

Row = Mapping[str, Any]
HIGH: Final = 0.9
"""The upper quantile of delays that is told beside the median."""


def turned(r: Row) -> float:
    """Return when the rate of a rig that rises first turned [h]."""
    return float(r["min_h"] if r["first_h"] is None else r["first_h"])


def fair_to_miss(r: Row) -> bool:
    """Say whether a rig must be detected: it turned, broke, and was watched beyond its 0.2 % offset.

    An extensometer taken off before that cannot show what comes after.
    """
    return bool(r["turns"] and r["ruptured"] and r["seen_h"] > (r["offset_h"] or r["end_h"]))


def is_late(r: Row) -> bool:
    """Say whether a rig was detected after its 0.2 % offset only."""
    return r["true_h"] is not None and r["offset_h"] is not None and r["true_h"] > r["offset_h"]


def over_best(r: Row, true_h: float | None) -> float | None:
    """Return the delay over the best possible: infinite if never detected, None where it cannot be judged."""
    if not r["turns"] or r["limit_h"] is None or r["seen_h"] <= r["limit_h"]:
        return None
    if true_h is None:
        return math.inf
    best = r["limit_h"] - turned(r)
    return (true_h - turned(r)) / best if best > 0.0 else None


def figures(rows: Sequence[Row]) -> dict[str, Any]:
    """Return all figures of a campaign.

    Delays count from the turn of the true rate. Those of rigs detected at all are told in hours and in shares
    of life; the one over the best possible counts undetected rigs as infinite.
    """
    rows = sorted(rows, key=lambda r: int(r["index"]))
    fair = [r for r in rows if fair_to_miss(r)]
    found = [r for r in fair if r["true_h"] is not None]
    delays = [r["true_h"] - turned(r) for r in found]
    between = [
        (r["true_h"] - r["min_h"]) / (r["offset_h"] - r["min_h"]) for r in found if r["offset_h"] is not None
    ]
    ratios = [x for r in rows if (x := over_best(r, r["true_h"])) is not None]
    return {
        "rigs": len(rows),
        "false": _share(sum(bool(r["false"]) for r in rows), len(rows)),
        "must_detect": len(fair),
        "missed": sum(r["true_h"] is None for r in fair),
        "after_offset": sum(is_late(r) for r in fair),
        "delay_h": _spread(delays),
        "delay_share_of_life": _spread([d / r["end_h"] for d, r in zip(delays, found, strict=True)]),
        "delay_minimum_to_offset": _spread(between),
        "delay_over_best": _spread(ratios),
        "onset_interval_holds": _holds([h for r in found if (h := _onset_held(r)) is not None]),
        "least_rate": _least_rate([r for r in rows if r["turns"] and r["least"] and r["true_h"] is not None]),
        "levels": _levels(rows),
    }


def _onset_held(r: Row) -> bool | None:
    return None if r["onset"] is None else bool(r["onset"][0] <= turned(r) <= r["onset"][1])


def _least_rate(rows: Sequence[Row]) -> dict[str, Any]:
    """Error and coverage of the last least rate of the rigs that turned and were detected.

    The truth is at the set point, so the rate is the corrected one where there is one, its interval moved
    in proportion. ``allowing``: against what the specimen does where its thermocouples show the set point
    (where the rate was corrected), or as the furnace ran (where it was not). Errors over the best possible
    are against the same: each rig's error by its own best standard error (``best``), or by that together
    with what bending adds.
    """
    errors, over, over_rms, held, allowing = [], [], [], [], []
    for r in rows:
        least = r["least"]
        known = least["corrected_rate_per_h"] or least["rate_per_h"]
        shift = known / least["rate_per_h"]
        low, high = least["low_per_h"] * shift, least["high_per_h"] * shift
        knowable = r["run_rate"] if least["corrected_rate_per_h"] is None else r["indicated_rate"]
        errors.append(abs(known / r["min_rate"] - 1.0))
        held.append(low <= r["min_rate"] <= high)
        allowing.append(low <= knowable <= high)
        if r["best_error"]:
            over.append(abs(known - knowable) / r["best_error"])
            over_rms.append(abs(known - knowable) / math.hypot(r["best_error"], r["best_bias"]))
    return {
        "error": _spread(errors),
        "error_over_best_standard_error": _spread(over),
        "error_over_best_rms": _spread(over_rms),
        "interval_holds": _holds(held),
        "interval_holds_allowing": _holds(allowing),
    }


def _levels(rows: Sequence[Row]) -> list[dict[str, Any]]:
    """One entry a level of evidence, the loosest first."""
    shares = sorted({x["false_share"] for r in rows for x in r["levels"]}, reverse=True)
    out = []
    for share in shares:
        at = [(r, x) for r in rows for x in r["levels"] if x["false_share"] == share]
        fair = [x for r, x in at if fair_to_miss(r)]
        ratios = [d for r, x in at if (d := over_best(r, x["true_h"])) is not None]
        out.append(
            {
                "false_share": share,
                "false": _share(sum(bool(x["false"]) for _, x in at), len(at)),
                "missed": sum(x["true_h"] is None for x in fair),
                "delay_over_best": _spread(ratios),
            }
        )
    return out


def _share(k: int, n: int) -> dict[str, Any]:
    low, high = clopper_pearson(k, n) if n else (0.0, 1.0)
    return {"count": k, "of": n, "share": k / n if n else None, "low_95": low, "high_95": high}


def _holds(held: Sequence[bool]) -> dict[str, Any]:
    return _share(sum(held), len(held))


def _spread(values: list[float]) -> dict[str, Any]:
    def told(share: float) -> float | None:
        x = quantile(values, share)
        return None if x is None or math.isinf(x) else x

    return {"of": len(values), "median": told(0.5), "high_90": told(HIGH)}
