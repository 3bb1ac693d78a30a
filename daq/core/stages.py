"""The stages of a test as a table: which cue leads from which stage to which.

A pair that is not in the table changes nothing. The diagram in DEVELOPERS.md is drawn from it.
"""

from __future__ import annotations

from enum import Enum
from typing import Final

from daq.codec import state


@state
class Stage(Enum):
    """Where a test is; the words of the trade."""

    HEATING = "heating"
    SOAKING = "soaking"
    LOADING = "loading"
    PRIMARY = "primary"
    SECONDARY = "secondary"
    TERTIARY = "tertiary"
    INVERSE_PRIMARY = "inverse primary"
    RUPTURED = "ruptured"
    ENDED = "ended"


class Cue(Enum):
    """What moves a test on."""

    AT_TEMPERATURE = "at_temperature"
    LOAD_BEGUN = "load_begun"
    FULL_LOAD = "full_load"
    RATE_STEADY = "rate_steady"
    RATE_FELL_ON = "rate_fell_on"
    RATE_ROSE_EARLY = "rate_rose_early"
    RATE_ROSE = "rate_rose"
    RISE_TAKEN_BACK = "rise_taken_back"
    RATE_FALLS = "rate_falls"
    STRESS_CHANGED = "stress_changed"
    RUPTURED = "ruptured"
    ENDED = "ended"


_ALIVE: Final = (
    Stage.HEATING, Stage.SOAKING, Stage.LOADING, Stage.PRIMARY,
    Stage.SECONDARY, Stage.TERTIARY, Stage.INVERSE_PRIMARY,
)  # fmt: skip
_LOADED: Final = (Stage.PRIMARY, Stage.SECONDARY, Stage.TERTIARY, Stage.INVERSE_PRIMARY)

TABLE: Final[dict[tuple[Stage, Cue], Stage]] = {
    (Stage.HEATING, Cue.AT_TEMPERATURE): Stage.SOAKING,
    (Stage.HEATING, Cue.LOAD_BEGUN): Stage.LOADING,
    (Stage.SOAKING, Cue.LOAD_BEGUN): Stage.LOADING,
    (Stage.HEATING, Cue.FULL_LOAD): Stage.PRIMARY,
    (Stage.SOAKING, Cue.FULL_LOAD): Stage.PRIMARY,
    (Stage.LOADING, Cue.FULL_LOAD): Stage.PRIMARY,
    (Stage.PRIMARY, Cue.RATE_STEADY): Stage.SECONDARY,
    (Stage.PRIMARY, Cue.RATE_ROSE): Stage.TERTIARY,
    (Stage.PRIMARY, Cue.RATE_ROSE_EARLY): Stage.INVERSE_PRIMARY,
    (Stage.SECONDARY, Cue.RATE_FELL_ON): Stage.PRIMARY,
    (Stage.SECONDARY, Cue.RATE_ROSE): Stage.TERTIARY,
    (Stage.SECONDARY, Cue.RATE_ROSE_EARLY): Stage.INVERSE_PRIMARY,
    (Stage.INVERSE_PRIMARY, Cue.RATE_FALLS): Stage.PRIMARY,
    (Stage.INVERSE_PRIMARY, Cue.RATE_STEADY): Stage.SECONDARY,
    (Stage.INVERSE_PRIMARY, Cue.RATE_ROSE): Stage.TERTIARY,
    (Stage.TERTIARY, Cue.RISE_TAKEN_BACK): Stage.SECONDARY,
    **{(s, Cue.STRESS_CHANGED): Stage.PRIMARY for s in _LOADED},
    **{(s, Cue.RUPTURED): Stage.RUPTURED for s in _ALIVE},
    **{(s, Cue.ENDED): Stage.ENDED for s in _ALIVE},
}


def following(stage: Stage, cue: Cue) -> Stage:
    """Return the stage after ``cue``; the same one where the cue means nothing."""
    return TABLE.get((stage, cue), stage)
