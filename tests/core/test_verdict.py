"""What evidence means for the stage: order, earliness, materiality."""

from __future__ import annotations

import numpy as np
import pytest

from daq.core import verdict
from daq.core.evidence import Evidence
from daq.core.stages import Cue, Stage

NONE = np.zeros((0, 4))


def evidence(**changed: float) -> Evidence:
    """Return a plain case for tertiary, changed where the test wants it."""
    plain: dict[str, float] = {
        "log_ratio": 20.0, "against_falling": 20.0, "since": 0.3, "fall_gain": 50.0, "fall_ratio": 3.0,
        "rise_ratio": 1.2, "offset": 2e-4, "minimum_share": 0.5,
    }  # fmt: skip
    return Evidence(**(plain | changed), noise=NONE, x=np.zeros(0), rates=np.zeros(0), model=(0.1, 1.0))


def judge(e: Evidence, now_h: float = 500.0, expected_h: float | None = None, **more: object) -> Cue | None:
    stage = more.get("stage", Stage.SECONDARY)
    assert isinstance(stage, Stage)
    return verdict.judge(e, stage, now_h, (7.3, 10.3), expected_h, bool(more.get("accelerates", True)))


def test_a_rise_after_a_fall_is_tertiary() -> None:
    """The order that counts."""
    assert judge(evidence()) is Cue.RATE_ROSE


@pytest.mark.parametrize("changed", [{"log_ratio": 7.2}, {"rise_ratio": 1.01}, {"rise_ratio": 20.0}])
def test_weak_small_or_abrupt_rises_are_none(changed: dict[str, float]) -> None:
    """Noise, a kelvin, a jerk."""
    assert judge(evidence(**changed)) is None


def test_a_rise_from_the_start_is_inverse_primary() -> None:
    """No fall and no steady stretch before it."""
    e = evidence(fall_gain=0.0, fall_ratio=1.0, since=0.88)
    assert judge(e) is Cue.RATE_ROSE_EARLY
    assert judge(e, stage=Stage.INVERSE_PRIMARY) is None


def test_incubation_is_said_on_full_evidence_only() -> None:
    """It asks for nothing from anybody: there is no haste."""
    assert judge(evidence(fall_gain=0.0, fall_ratio=1.0, since=0.88, log_ratio=9.0)) is None


def test_less_evidence_must_last_longer() -> None:
    """What drift feigns goes back within the time it took to come; damage goes on."""
    levels = verdict.levels(0.005)
    assert levels == pytest.approx((7.298, 10.298), abs=1e-3)
    assert verdict.has_lasted(10.3, 0.0, 100.0, levels)
    assert not verdict.has_lasted(7.3, 9.9, 100.0, levels)
    assert verdict.has_lasted(7.3, 10.1, 100.0, levels)
    assert not verdict.has_lasted(8.8, 4.9, 100.0, levels)
    assert verdict.has_lasted(8.8, 5.1, 100.0, levels)


@pytest.mark.parametrize(("log_ratio", "rise"), [(12.0, 1.04), (7.5, 1.2)])
def test_small_rises_and_falling_rates_ask_for_more(log_ratio: float, rise: float) -> None:
    """A wave of the rate by a few per cent is none; primary that was never steady is hard to model."""
    e = evidence(log_ratio=log_ratio, rise_ratio=rise)
    assert judge(e, stage=Stage.PRIMARY) is None
    assert judge(evidence(log_ratio=21.0, rise_ratio=rise), stage=Stage.PRIMARY) is Cue.RATE_ROSE


def test_a_steady_stretch_stands_for_a_fall() -> None:
    """Some materials show no primary creep."""
    assert judge(evidence(fall_gain=0.0, fall_ratio=1.0, since=0.3)) is Cue.RATE_ROSE


def test_early_in_the_expected_life_a_dip_is_not_believed() -> None:
    """Recovery of an early dip of the rate fooled simpler detectors."""
    assert judge(evidence(), 50.0, 1000.0) is None
    assert judge(evidence(), 300.0, 1000.0) is Cue.RATE_ROSE
    assert judge(evidence(rise_ratio=4.0, offset=0.003), 50.0, 1000.0) is Cue.RATE_ROSE


def test_an_expectation_ten_times_too_long_does_not_hide_a_clear_turn() -> None:
    """A laboratory's idea of the life may be wrong by an order of magnitude; a clear curve is not."""
    clear = {"fall_ratio": 2.5, "fall_gain": 60.0, "rise_ratio": 1.6, "offset": 0.0007, "log_ratio": 25.0}
    assert judge(evidence(**clear), 25.0, 900.0) is Cue.RATE_ROSE
    for name, less in (("fall_ratio", 1.5), ("rise_ratio", 1.3), ("offset", 0.0002), ("log_ratio", 15.0)):
        assert judge(evidence(**{**clear, name: less}), 25.0, 900.0) is None


def test_well_into_the_expected_life_a_rise_without_a_fall_counts_if_it_goes_on() -> None:
    """Damage from the first hour on accelerates; incubation saturates."""
    e = evidence(fall_gain=0.0, fall_ratio=1.0, since=0.88)
    assert judge(e, 300.0, 1000.0) is Cue.RATE_ROSE
    assert judge(e, 300.0, 1000.0, accelerates=False) is Cue.RATE_ROSE_EARLY


def test_the_rise_that_made_it_inverse_primary_does_not_make_it_tertiary() -> None:
    """A fit that happens to see a fall a little later is still the fit of the same rise."""
    e = evidence(since=0.88)
    assert judge(e, stage=Stage.INVERSE_PRIMARY) is None
    assert judge(evidence(since=0.3), stage=Stage.INVERSE_PRIMARY) is Cue.RATE_ROSE
