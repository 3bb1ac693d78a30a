"""The table of stages, every pair of it."""

from __future__ import annotations

import pytest

from daq.core.stages import TABLE, Cue, Stage, following

ENDS = {Stage.RUPTURED, Stage.ENDED}


@pytest.mark.parametrize("stage", list(Stage))
@pytest.mark.parametrize("cue", list(Cue))
def test_every_pair_leads_to_a_stage_and_ends_are_final(stage: Stage, cue: Cue) -> None:
    """No cue may bring a broken specimen back, and no pair may be undefined."""
    after = following(stage, cue)
    assert isinstance(after, Stage)
    assert after is TABLE.get((stage, cue), stage)
    if stage in ENDS:
        assert after is stage
    if cue is Cue.RUPTURED and stage not in ENDS:
        assert after is Stage.RUPTURED


def test_tertiary_is_entered_by_a_rise_alone_and_left_by_taking_it_back() -> None:
    """Order matters: nothing else may call a test tertiary."""
    assert {cue for (_, cue), after in TABLE.items() if after is Stage.TERTIARY} == {Cue.RATE_ROSE}
    left = {cue for (stage, cue) in TABLE if stage is Stage.TERTIARY}
    assert left == {Cue.RISE_TAKEN_BACK, Cue.STRESS_CHANGED, Cue.RUPTURED, Cue.ENDED}


def test_a_stage_name_is_a_word_of_the_trade() -> None:
    """Outside programs match these names."""
    assert [s.value for s in Stage] == [
        "heating",
        "soaking",
        "loading",
        "primary",
        "secondary",
        "tertiary",
        "inverse primary",
        "ruptured",
        "ended",
    ]
