"""From scans to rungs: what is carried on from leaf to leaf."""

from __future__ import annotations

import numpy as np

from daq.core import follow, ladder
from daq.core.block import Block
from daq.core.rules import ChannelRules, Role, Specimen, TestRules

RULES = TestRules(
    "hall", "H1", "H1", Specimen("S-1"),
    (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("right", Role.STRAIN, "B")),
    set_point_c=600.0, activation_energy_j_per_mol=300e3,
)  # fmt: skip


def block(
    t_h: np.ndarray, a: np.ndarray, b: np.ndarray | None = None, temp: np.ndarray | None = None,
    output: np.ndarray | None = None,
) -> Block:  # fmt: skip
    """Return a block of converted scans from hours and strains."""
    none = np.full(t_h.size, np.nan)
    values = np.zeros((t_h.size, 0))
    return Block(
        0, np.round(t_h * 3.6e7).astype(np.int64), t_h * 3600.0, values, values.astype(np.uint8),
        a, none if b is None else b, none if temp is None else temp, none,
        none if output is None else output,
    )  # fmt: skip


def rungs_of(b: Block) -> np.ndarray:
    """Return the ladder after all scans of ``b``."""
    return follow.follow(follow.begin(RULES), RULES, b)[0].rungs


def test_the_output_and_its_integral_over_equivalent_time_are_in_every_rung() -> None:
    """A drifting thermocouple shows nowhere else; judged by the whole record's sums at once."""
    t = np.linspace(0.0, 200.0, 2001)
    temp = 600.0 + 2.0 * np.sin(t / 20.0)
    output = 48.0 + 0.02 * t + np.sin(t / 7.0)
    output[500:520] = np.nan
    rungs = rungs_of(block(t, 1e-5 * t, temp=temp, output=output))
    held = output.copy()
    held[500:520] = output[499]
    seen = int(np.sum(rungs[:, ladder.N]))
    weights = rungs[:, ladder.N]
    assert abs(np.average(rungs[:, ladder.OUT], weights=weights) - held[:seen].mean()) < 1e-9
    middle = 0.5 * (temp[1:] + temp[:-1])
    factor = np.exp(300e3 / 8.314462618 * (1.0 / 873.15 - 1.0 / (273.15 + middle)))
    steps = factor * np.diff(t) * (0.5 * (held[1:] + held[:-1]) - held[0])
    whole = np.concatenate(([0.0], np.cumsum(steps)))
    assert abs(np.average(rungs[:, ladder.OQ], weights=weights) - whole[:seen].mean()) < 1e-6


def test_without_an_output_channel_the_columns_say_so() -> None:
    """NaN means not logged; an integral of nothing is zero."""
    t = np.linspace(0.0, 50.0, 400)
    rungs = rungs_of(block(t, 1e-5 * t))
    assert np.isnan(rungs[:, ladder.OUT]).all()
    assert (rungs[:, ladder.OQ] == 0.0).all()
