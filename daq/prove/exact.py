"""Exact binomial intervals without a statistics library at run time.

Clopper & Pearson 1934 (doi:10.1093/biomet/26.4.404): the bounds are the shares at which what was seen, or
more (or less) of it, has the probability (1 - level)/2. The tail is summed from log binomials, and the
bound found by bisection: exact to the last digits that a table shows, for any number of rigs one can run.
"""

from __future__ import annotations

import math

import numpy as np

from daq.records import CoreError

_HALVINGS = 60
"""Halvings of [0, 1]: finer than a double tells apart near any bound that is not 0."""


def clopper_pearson(k: int, n: int, level: float = 0.95) -> tuple[float, float]:
    """Return the exact two-sided interval of the share behind ``k`` seen in ``n``.

    Raises:
        CoreError: not 0 <= k <= n with n > 0, or ``level`` not in (0, 1).
    """
    if not (0 <= k <= n and n > 0 and 0.0 < level < 1.0):
        raise CoreError(
            f"interval: got {k} of {n} at level {level}, wanted 0 <= k <= n, n > 0, level in (0, 1)"
        )
    tail = (1.0 - level) / 2.0
    low = 0.0 if k == 0 else _share_at(k, n, tail)
    high = 1.0 if k == n else 1.0 - _share_at(n - k, n, tail)
    return low, high


def _share_at(k: int, n: int, tail: float) -> float:
    """Return the share p at which k or more of n has probability ``tail``; it rises with p."""
    i = np.arange(k, n + 1)
    chosen = np.array([math.lgamma(n + 1) - math.lgamma(j + 1) - math.lgamma(n - j + 1) for j in i.tolist()])
    low, high = 0.0, 1.0
    for _ in range(_HALVINGS):
        p = 0.5 * (low + high)
        if float(np.sum(np.exp(chosen + i * math.log(p) + (n - i) * math.log1p(-p)))) < tail:
            low = p
        else:
            high = p
    return 0.5 * (low + high)


def quantile(values: list[float], share: float) -> float | None:
    """Return the least of ``values`` that at least ``share`` of them do not exceed; None for no values.

    Always one of the values, so that an infinite one (never detected) can stand among them.
    """
    if not values:
        return None
    return sorted(values)[max(math.ceil(share * len(values)) - 1, 0)]
