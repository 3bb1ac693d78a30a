"""The clock that must be paid up and paid back, against a plain scan-by-scan account."""

from __future__ import annotations

import itertools

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.core import leaves
from daq.core.hold import BEYOND, CLEAR, REST, Rows, hold


def by_hand(code: list[int], step: list[int], wanted: int) -> list[tuple[int, bool]]:
    """The same rule, one reading after the other."""
    credit, active, before, turns = 0, False, CLEAR, []
    for row, (c, dt) in enumerate(zip(code, step, strict=True)):
        if active:
            pair = (before != CLEAR) == (c != CLEAR)
            credit += (dt if c != CLEAR else -dt) if pair else 0
            credit = min(credit, wanted)
            if c == CLEAR and pair and dt > 0 and credit <= 0:
                active, credit = False, 0
                turns.append((row, False))
        else:
            pair = (before == BEYOND) == (c == BEYOND)
            credit += (dt if c == BEYOND else -dt) if pair else 0
            credit = max(credit, 0)
            if c == BEYOND and credit >= wanted:
                active, credit = True, wanted
                turns.append((row, True))
        before = c
    return turns


@settings(max_examples=150, deadline=None)
@given(
    readings=st.lists(st.tuples(st.integers(0, 2), st.integers(1, 9)), min_size=1, max_size=80),
    wanted=st.integers(1, 25),
    cuts=st.sets(st.integers(1, 79), max_size=8),
)
def test_runs_of_readings_give_what_single_readings_give(
    readings: list[tuple[int, int]], wanted: int, cuts: set[int]
) -> None:
    """Whole runs are taken at once for speed; that must not change an answer, nor may cuts."""
    code = np.array([c for c, _ in readings], np.int8)
    step = np.array([dt for _, dt in readings], np.int64)
    n = code.size
    scan = np.arange(n)
    edges = [0, *sorted(c for c in cuts if c < n), n]
    h, turns = REST, []
    for i, j in itertools.pairwise(edges):
        rows = Rows(scan[i:j], scan[i:j], scan[i:j].astype(float), step[i:j])
        h, said = hold(h, code[i:j], code[i:j].astype(float), rows, wanted)
        turns += [(i + t.row, t.active) for t in said]
    assert turns == by_hand(code.tolist(), step.tolist(), wanted)


def test_leaf_means_are_means_and_leaves_lie_on_the_grid_of_scans() -> None:
    """Sixteen scans a leaf, wherever the blocks were cut; NaN where fewer than eight readings count."""
    rng = np.random.default_rng(0)
    x = rng.normal(size=(100, 2))
    x[16:26, 1] = np.nan
    tick = np.arange(100)
    s = leaves.begin(2)
    found = []
    for i, j in ((0, 5), (5, 6), (6, 70), (70, 100)):
        s, closed = leaves.take(s, tick[i:j], x[i:j])
        if closed is not None:
            found += [(i + int(e), m) for e, m in zip(closed.end, closed.mean, strict=True)]
    assert [end for end, _ in found] == [16, 32, 48, 64, 80, 96]
    for k, (_, mean) in enumerate(found):
        leaf = x[16 * k : 16 * k + 16]
        assert np.isclose(mean[0], leaf[:, 0].mean(), atol=1e-14)
        assert np.isnan(mean[1]) if k == 1 else np.isclose(mean[1], np.nanmean(leaf[:, 1]), atol=1e-14)
    assert s.scans == 100
    assert s.tick.tolist() == [96, 97, 98, 99]


def test_a_gap_is_five_usual_intervals_and_bursts_are_not_usual() -> None:
    """A thousand fast records between slow ones must not turn slow intervals into gaps."""
    interval = np.concatenate(
        (np.full(100, 300.0), np.full(1000, 1.0), np.full(100, 300.0), [4000.0], np.full(5, 300.0))
    )
    tick = np.cumsum(interval * 10_000).astype(np.int64)
    _, paced = leaves.pace(leaves.Cadence(), tick, None)
    gaps = np.flatnonzero(paced.interval >= paced.gap)
    assert gaps.tolist() == [1200]
    assert paced.step[1200] == 0


def test_unordered_stamps_are_no_gaps_and_no_time() -> None:
    """Equal and slightly unordered stamps occur in real records."""
    tick = np.array([0, 10, 20, 15, 20, 30, 29, 40]) * 10_000
    _, paced = leaves.pace(leaves.Cadence(), tick, 10.0)
    assert paced.step.tolist() == [x * 10_000 for x in (0, 10, 10, 0, 0, 10, 0, 10)]
