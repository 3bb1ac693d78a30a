"""Scans put together again: nothing lost, nothing moved past another fact of its frame."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from daq.joining import joined
from daq.records import Fact, ScansTaken, Stamp, Ticked

FRAMES = ("", "H1", "H2")


def _fact(kind: str, frame: str, at: int, boot: str) -> Fact:
    if kind == "tick" or not frame:
        return Ticked(Stamp(at, at, boot), frame)
    tick = np.array([at], np.int64)
    return ScansTaken(frame, ("x",), boot, tick, tick, np.array([[float(at)]]), np.zeros((1, 1), np.uint8))


FACTS = st.lists(
    st.tuples(
        st.sampled_from(["scan", "scan", "scan", "tick"]), st.sampled_from(FRAMES), st.sampled_from("ab")
    ),
    max_size=60,
)


def _seen_by(frame: str, facts: list[Fact]) -> list[tuple[str, int]]:
    """Return what one frame sees, scan by scan, in its order."""
    seen: list[tuple[str, int]] = []
    for fact in facts:
        if isinstance(fact, ScansTaken):
            if fact.frame == frame:
                seen += [(fact.boot_id, t) for t in fact.utc_tick.tolist()]
        elif fact.frame in ("", frame):
            seen.append(("tick", fact.stamp.utc_tick))
    return seen


@given(FACTS, st.integers(1, 9))
def test_every_frame_sees_the_same_in_the_same_order(kinds: list[tuple[str, str, str]], most: int) -> None:
    """Order within a frame and against the host is what findings stand on."""
    facts = [_fact(kind, frame, i, boot) for i, (kind, frame, boot) in enumerate(kinds)]
    together = list(joined(facts, most))
    for frame in FRAMES[1:]:
        assert _seen_by(frame, together) == _seen_by(frame, facts)
    assert all(len(f) <= most for f in together if isinstance(f, ScansTaken))


def test_a_run_becomes_one_block() -> None:
    """That is what it is for."""
    (block,) = joined([_fact("scan", "H1", i, "a") for i in range(50)])
    assert isinstance(block, ScansTaken)
    assert len(block) == 50
