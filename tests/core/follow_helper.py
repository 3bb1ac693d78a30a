"""Blocks of converted scans from plain arrays, and a follower run over them."""

from __future__ import annotations

import dataclasses
import itertools
from collections.abc import Sequence

import numpy as np

from daq.core import follow
from daq.core.block import Block, Conclusion
from daq.core.rules import ChannelRules, Role, Specimen, TestRules

RULES = TestRules(
    "hall", "H1", "H1", Specimen("S-1"),
    (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("right", Role.STRAIN, "B")),
    set_point_c=600.0, activation_energy_j_per_mol=300e3,
)  # fmt: skip
BARE = dataclasses.replace(RULES, set_point_c=None, activation_energy_j_per_mol=None)


def block_of(
    t_s: np.ndarray, a: np.ndarray, b: np.ndarray | None = None, *, first: int = 0, **other: np.ndarray
) -> Block:
    """Return a block from seconds and strains; ``temp``, ``room``, ``output`` where they are logged."""
    none, values = np.full(t_s.size, np.nan), np.zeros((t_s.size, 0))
    return Block(
        first, np.round(t_s * 1e4).astype(np.int64), t_s, values, values.astype(np.uint8),
        a, none if b is None else b, other.get("temp", none), other.get("room", none),
        other.get("output", none),
    )  # fmt: skip


def listen(
    block: Block, rules: TestRules = RULES, cuts: Sequence[int] = ()
) -> tuple[follow.FollowState, list[Conclusion]]:
    """Run the follower over ``block``, cut at the rows given."""
    s, said = follow.begin(rules), []
    for lo, hi in itertools.pairwise([0, *sorted(cuts), len(block)]):
        s, some = follow.follow(s, rules, block.cut(lo, hi))
        said += some
    return s, said


def end(
    s: follow.FollowState, block: Block, rules: TestRules = RULES, cue: str = "ended"
) -> tuple[follow.FollowState, list[Conclusion]]:
    """Tell the follower that the test is over, or that the stress changed, at the last scan of ``block``."""
    s, said = follow.tell(
        s, rules, cue, int(block.tick[-1]), float(block.t_s[-1]), block.first + len(block) - 1
    )
    return s, list(said)


def stages(said: list[Conclusion]) -> list[str]:
    """Return the stages said, in order."""
    return [c.key for c in said if c.kind == "stage"]
