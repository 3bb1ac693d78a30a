"""What the evidence means for the stage: order, earliness and materiality.

Evidence says that the rate rises. Whether that is tertiary creep depends on what went before: tertiary
follows a least rate that was reached by a fall or held for a steady stretch. A rise before that, or one
very early in the life that the laboratory expects, is inverse primary creep (incubation): solid solutions,
recovery of an early dip."""

from __future__ import annotations

from typing import Final

import numpy as np

from daq.core.evidence import Evidence
from daq.core.stages import Cue, Stage

BEYOND_VILLE: Final = 5.0
"""What is asked beyond log(1/alpha) of evidence that is to be believed at once, because the noise model and
the family of curves are fitted: from campaigns."""
BEYOND_IF_LASTING: Final = 2.0
"""What is asked beyond log(1/alpha) of evidence that is to be believed if it lasts: from campaigns."""
FALLING: Final = 1.0
"""And more of it while the rate has never been steady: unmodelled primary creep feigns most."""
LASTS: Final = 0.1
"""Such evidence is believed once it has lasted for this share of the time since the onset, and so
in proportion between the two: what drift, jerks and small slips feign goes back, while damage goes on. It
costs a tenth of the delay where waiting for more evidence would cost a fifth."""
EARLY: Final = 0.09
"""Share of the expected life before which a rise is not yet called tertiary: curves without a plateau have
their least rate at 12 % of life and more (open measured curves), and say so by 20 to 30 %: an expectation
twice too long still leaves them time before their 0.2 % offset."""
EARLY_RISE: Final = 3.0
"""Unless the rate has risen this much: more than inverse primary creep does (1.2 to 2.5-fold)."""
LEAST_RISE: Final = 1.025
SMALL_RISE: Final = 1.05
"""A rise by less than what one kelvin does to the rate (2 to 10 %) is not worth a word: no furnace is known
better. Up to the middle of that it may be a wave of the rate, and is believed on twice the evidence."""
OFFSET: Final = 0.002
"""And the curve has left its tangent by the 0.2 % of the trade's own definition."""
WELL_ON: Final = 0.2
"""Share of the expected life from which a rise without a fall before it is called tertiary all the same:
inverse primary creep is over within the first tenth, and the expectation is trusted within a factor of
two."""
ABRUPT: Final = 8.0
"""A rise by more than this where none was seen a look before is a jerk or a slip, unless the evidence is
beyond all doubt: damage and necking raise the rate by tens of per cent between looks."""
FALL_GAIN: Final = 3.0
"""Log likelihood that a fall before the onset must gain: one in twenty for one more column."""
FALL_RATIO: Final = 1.08
"""And the rate must have fallen by more than a kelvin or two would make it."""
STEADY_SHARE: Final = 0.6
"""Share of the elapsed time that a steady stretch before the onset must fill where there was no fall."""

DEEP_FALL: Final = 2.0
CLEAR_RISE: Final = 1.5
CLEAR_OFFSET: Final = 0.0005
"""An expectation may be wrong by an order of magnitude. However early it says a rise is, one that follows a
fall to half, by half, a quarter of the 0.2 % offset high and on twice the evidence is believed."""


def _settled(e: Evidence, high: float) -> bool:
    return (
        e.fall_gain >= FALL_GAIN
        and e.fall_ratio >= DEEP_FALL
        and e.rise_ratio >= CLEAR_RISE
        and e.offset >= CLEAR_OFFSET
        and e.log_ratio >= 2.0 * high
    )


def levels(false_share: float) -> tuple[float, float]:
    """Return the evidence that is believed if it lasts, and the one that is believed at once."""
    ville = float(np.log(1.0 / false_share))
    return ville + BEYOND_IF_LASTING, ville + BEYOND_VILLE


def has_lasted(log_ratio: float, held_h: float, since_onset_h: float, levels: tuple[float, float]) -> bool:
    """Say whether evidence held for so long is to be believed; ``since_onset_h`` as it was at first."""
    low, high = levels
    short_of = max(0.0, (high - log_ratio) / (high - low))
    return held_h >= LASTS * since_onset_h * short_of


def judge(
    e: Evidence,
    stage: Stage,
    now_h: float,
    levels: tuple[float, float],
    expected_h: float | None,
    accelerates: bool,
) -> Cue | None:
    """Return the cue that the evidence gives, None for none.

    ``levels``: of evidence, see :func:`levels`. ``accelerates``: the rise of the rate has not slowed down
    from the middle to the last third of the time; asked for where there was no fall, since incubation
    saturates and tertiary creep does not.
    """
    low, high = levels
    fell = e.fall_gain >= FALL_GAIN and e.fall_ratio >= FALL_RATIO
    asked = high if not fell else low if stage is Stage.SECONDARY else low + FALLING
    if e.log_ratio < asked or e.rise_ratio < LEAST_RISE:
        return None
    if e.rise_ratio < SMALL_RISE and e.log_ratio < 2.0 * high:
        return None
    if e.rise_ratio > ABRUPT and e.log_ratio < 2.5 * high:
        return None
    early = Cue.RATE_ROSE_EARLY if e.log_ratio >= high else None
    steady = 1.0 - e.since >= STEADY_SHARE
    overwhelming = e.rise_ratio >= EARLY_RISE and e.offset >= OFFSET and (fell or accelerates)
    well_on = expected_h is not None and now_h >= WELL_ON * expected_h and accelerates
    if expected_h is not None and now_h < EARLY * expected_h and not (overwhelming or _settled(e, high)):
        return None if fell or stage is Stage.INVERSE_PRIMARY else early
    if stage is Stage.INVERSE_PRIMARY:  # the same early rise, seen a little later, is not another one
        return Cue.RATE_ROSE if overwhelming or well_on or (fell and steady) else None
    if not (fell or steady or overwhelming or well_on):
        return early
    return Cue.RATE_ROSE
