"""Rungs from scans, for tests that need a ladder and no intake."""

from __future__ import annotations

import numpy as np

from daq.core import ladder


def rungs_of(t_h: np.ndarray, strain: np.ndarray, groups: int = 150) -> np.ndarray:
    """Return about ``groups`` rungs of equal numbers of scans; (groups, COLUMNS)."""
    out = []
    for part in np.array_split(np.arange(t_h.size), min(groups, t_h.size)):
        t, e = t_h[part], strain[part]
        r = np.zeros(ladder.COLUMNS)
        r[ladder.N] = t.size
        r[ladder.T] = r[ladder.U] = np.mean(t)
        r[ladder.E] = np.mean(e)
        d, f = t - np.mean(t), e - np.mean(e)
        r[ladder.S_TT], r[ladder.S_TE], r[ladder.S_EE] = np.sum(d * d), np.sum(d * f), np.sum(f * f)
        r[ladder.START], r[ladder.END] = t[0], t[-1]
        r[[ladder.TEMP, ladder.ROOM0, ladder.ROOM1, ladder.ROOM2]] = np.nan
        out.append(r)
    return np.array(out)
