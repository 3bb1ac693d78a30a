"""Whatever happens to single readings stays where it happened."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.core import intake, ladder
from daq.core.block import Block
from daq.core.rules import ChannelRules, Role, Specimen, TestRules

SD = 8e-6
SCANS = 500
RULES = TestRules(
    "hall", "H1", "H1", Specimen("S-1"),
    (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("right", Role.STRAIN, "B")),
)  # fmt: skip
LEVEL_ERRORS = 5.0
"""A step's size is known to about 0.9 noises of a scan (medians of eight, twice): five of those."""


def record(seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return 250 h of primary creep on two sides."""
    rng = np.random.default_rng(seed)
    t = np.linspace(0.0, 250.0, SCANS)
    e = 2e-3 * (1.0 - np.exp(-t / 40.0)) + 1e-5 * t
    return t, 0.95 * e + rng.normal(0.0, SD, SCANS), 1.05 * e + rng.normal(0.0, SD, SCANS)


def clean(t: np.ndarray, a: np.ndarray, b: np.ndarray) -> tuple[list[intake.Step], np.ndarray]:
    """Return the steps and the leaves."""
    none = np.full(t.size, np.nan)
    values = np.zeros((t.size, 0))
    block = Block(
        0, np.round(t * 3.6e7).astype(np.int64), t * 3600.0, values, values.astype(np.uint8),
        a, b, none, none, none,
    )  # fmt: skip
    s, rows, at = intake.IntakeState(), intake.rows_of(block, 0.0), 0
    clock = np.maximum.accumulate(rows[:, intake.T_S])
    steps, rungs = [], []
    while at < rows.shape[0]:
        s, after, leaf = intake.next_leaf(s, RULES, rows, clock, at, at > SCANS - 20)
        assert leaf is not None
        at = after
        if leaf.step is not None:
            steps.append(leaf.step)
        if leaf.rung is not None:
            rungs.append(leaf.rung)
    return steps, np.concatenate(rungs)


def off(changed: np.ndarray, plain: np.ndarray) -> np.ndarray:
    """Return by how much the strain of ``changed`` differs, at its own times, from that of ``plain``."""
    return changed[:, ladder.E] - np.interp(changed[:, ladder.T], plain[:, ladder.T], plain[:, ladder.E])


PLAIN = {seed: clean(*record(seed)) for seed in range(3)}
PLACES = st.integers(80, SCANS - 40)
SEEDS = st.sampled_from(sorted(PLAIN))
SIGNS = st.sampled_from([-1.0, 1.0])


@settings(max_examples=15, deadline=None)
@given(SEEDS, PLACES, st.floats(12.0, 1e4), SIGNS)
def test_a_spike_changes_nothing_elsewhere(seed: int, at: int, sds: float, sign: float) -> None:
    """It is left out, and the level after it is what it was."""
    t, a, b = record(seed)
    a[at] += sign * sds * SD
    steps, rungs = clean(t, a, b)
    assert steps == []
    d = off(rungs, PLAIN[seed][1])
    assert np.abs(d[rungs[:, ladder.T] < t[at] - 1.5]).max() < 1e-9
    assert np.abs(d).max() < LEVEL_ERRORS * SD
    # leaves after it may be cut elsewhere: other scans in each, the same level
    assert abs(np.mean(d[rungs[:, ladder.T] > t[at]])) < 0.5 * SD


@settings(max_examples=15, deadline=None)
@given(SEEDS, PLACES, st.floats(12.0, 1e3), SIGNS, st.booleans())
def test_a_slip_is_taken_out_to_the_noise_of_its_size(
    seed: int, at: int, sds: float, sign: float, both: bool
) -> None:
    """Wherever it lies, before it nothing changes and after it only the error of its size."""
    t, a, b = record(seed)
    a[at:] += sign * sds * SD
    if both:
        b[at:] += sign * sds * SD
    steps, rungs = clean(t, a, b)
    assert [s.sides for s in steps] == [("A", "B") if both else ("A",)]
    d = off(rungs, PLAIN[seed][1])
    assert np.abs(d[rungs[:, ladder.T] < t[at] - 1.5]).max() < 1e-9
    assert np.abs(d).max() < LEVEL_ERRORS * SD


@settings(max_examples=15, deadline=None)
@given(SEEDS, PLACES, st.integers(1, 30), st.sampled_from(["A", "B", "both"]))
def test_a_gap_changes_nothing_elsewhere(seed: int, at: int, long: int, side: str) -> None:
    """Of the whole or of one side, which the half difference of the sides bridges."""
    t, a, b = record(seed)
    for name, v in (("A", a), ("B", b)):
        if side in (name, "both"):
            v[at : at + long] = np.nan
    steps, rungs = clean(t, a, b)
    assert steps == []
    d = off(rungs, PLAIN[seed][1])
    assert np.abs(d[rungs[:, ladder.T] < t[at] - 1.5]).max() < 1e-9
    bent = 0.05 * 2.5e-3 * min(1.0, long / 80.0)  # the sides go apart meanwhile
    assert np.abs(d).max() < LEVEL_ERRORS * SD + bent


@settings(max_examples=10, deadline=None)
@given(SEEDS, PLACES, st.floats(-0.5, 0.5))
def test_a_constant_added_changes_nothing(seed: int, at: int, constant: float) -> None:
    """Strain has no natural zero; binary fractions, so that no reading is rounded."""
    t, a, b = record(seed)
    grid = 2.0**-34
    a, b = np.round(a / grid) * grid, np.round(b / grid) * grid
    c = round(constant / grid) * grid
    a[at:] += 1024 * SD
    a = np.round(a / grid) * grid
    steps, rungs = clean(t, a, b)
    moved, raised = clean(t, a + c, b + c)
    assert [(s.scan, s.time_h, s.sides) for s in moved] == [(s.scan, s.time_h, s.sides) for s in steps] != []
    np.testing.assert_allclose([s.size for s in moved], [s.size for s in steps], rtol=0.0, atol=1e-12)
    np.testing.assert_allclose(raised[:, ladder.E], rungs[:, ladder.E] + c, rtol=0.0, atol=1e-12)


@settings(max_examples=10, deadline=None)
@given(SEEDS, PLACES, st.floats(12.0, 1e3), SIGNS)
def test_swapping_the_sides_changes_nothing_but_names(seed: int, at: int, sds: float, sign: float) -> None:
    """Nobody knows which side of a specimen is the left one."""
    t, a, b = record(seed)
    a[at:] += sign * sds * SD
    a[at - 20] += 1e-3
    b[at + 20 : at + 32] = np.nan
    steps, rungs = clean(t, a, b)
    names, other = clean(t, b, a)
    swap = str.maketrans("AB", "BA")
    assert [tuple(x.translate(swap) for x in s.sides) for s in names] == [s.sides for s in steps]
    assert [(s.scan, s.size) for s in names] == [(s.scan, s.size) for s in steps]
    np.testing.assert_allclose(other[:, ladder.E], rungs[:, ladder.E], rtol=0.0, atol=1e-15)
