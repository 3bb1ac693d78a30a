"""Scoring of simulated rigs: exact intervals, bounds from the truth, levels that share their work."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import beta

from daq.core import follow, limit
from daq.core.rules import ChannelRules, Role, Specimen, TestRules
from daq.prove import best, score, table
from daq.prove.exact import clopper_pearson, quantile
from daq.records import CoreError
from simulator.alike import Alike, draw
from simulator.creep import Theta
from simulator.rig import Run, simulate
from simulator.spec import Furnace, RigSpec, Sampling, Thermocouple, Told, Transducer

RULES = TestRules(
    "hall-a",
    "H1",
    "H1",
    Specimen("S-1"),
    (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("right", Role.STRAIN, "B")),
    set_point_c=980.0,
    activation_energy_j_per_mol=330e3,
    expected_rupture_h=900.0,
)
FRAME = Alike(2, 3, 980.0, 5.0, Told(330e3, 900.0), room=True, most_scans=100)


def _theta(every_s: float = 900.0, **more: object) -> Run:
    """A theta curve with known minimum under white noise, in a steady furnace, without any event."""
    spec = RigSpec(
        creep=Theta(0.01, 0.02, 0.01, 0.004),
        duration_h=600.0,
        rupture_h=500.0,
        seed=7,
        transducers=(Transducer("left", "A", white=10e-6), Transducer("right", "B", white=10e-6)),
        furnace=Furnace(980.0, 0.0),
        sampling=Sampling(every_s=every_s),
    )
    return simulate(replace(spec, **more))  # type: ignore[arg-type]


@pytest.mark.parametrize(("k", "n"), [(0, 1), (0, 300), (1, 300), (12, 2000), (150, 300), (299, 300), (7, 7)])
@pytest.mark.parametrize("level", [0.9, 0.95])
def test_the_exact_interval_is_that_of_the_beta_distribution(k: int, n: int, level: float) -> None:
    """Clopper and Pearson's bounds are quantiles of beta distributions; scipy has those."""
    tail = (1.0 - level) / 2.0
    low = 0.0 if k == 0 else beta.ppf(tail, k, n - k + 1)
    high = 1.0 if k == n else beta.ppf(1.0 - tail, k + 1, n - k)
    assert clopper_pearson(k, n, level) == pytest.approx((low, high), rel=1e-9, abs=1e-12)


def test_an_interval_of_nothing_is_refused() -> None:
    """No rigs have no share of false ones."""
    with pytest.raises(CoreError, match="got 1 of 0"):
        clopper_pearson(1, 0)


def test_a_quantile_may_stand_next_to_infinity() -> None:
    """Undetected rigs delay for ever; that must not spoil the quantiles below them."""
    assert quantile([1.0, 2.0, math.inf], 0.5) == 2.0
    assert quantile([1.0, 2.0, math.inf], 0.9) == math.inf
    assert quantile([], 0.5) is None


def test_the_best_slope_error_is_the_textbook_one_under_white_noise() -> None:
    """Least squares on n equally good readings: variance sigma^2 / sum (t - mean)^2."""
    t = np.sort(np.random.default_rng(5).uniform(0.0, 1000.0, 150))  # fewer than blocks: nothing is merged
    expected = 3e-6 / np.sqrt(np.sum((t - t.mean()) ** 2))
    assert best.slope_error(t, limit.Noise(3e-6)) == pytest.approx(expected, rel=1e-9)


def test_blocks_cost_the_best_slope_error_next_to_nothing() -> None:
    """Hundreds of blocks keep all that a straight line asks of thousands of scans, drift or not."""
    t = np.linspace(0.0, 1000.0, 1200)
    noise = limit.Noise(3e-6, 0.0, ((2e-6, 50.0),))
    covariance = 4e-12 * np.exp(-np.abs(t[:, None] - t[None, :]) / 50.0) + 9e-12 * np.eye(t.size)
    line = np.column_stack((np.ones(t.size), t))
    expected = np.sqrt(np.linalg.inv(line.T @ np.linalg.solve(covariance, line))[1, 1])
    assert best.slope_error(t, noise) == pytest.approx(expected, rel=2e-3)


def test_two_scans_make_no_error() -> None:
    """A line through two points has no scatter to learn from."""
    assert best.slope_error(np.array([0.0, 1.0]), limit.Noise(1e-6)) is None


def test_the_stretch_is_where_the_rate_is_within_two_per_cent_of_its_least() -> None:
    """On a theta curve the ends of the stretch can be worked out: the rate there is 1.02 times the least."""
    run = _theta()
    low, high = best.stretch(run)
    rate = run.spec.creep.rate(np.array([low, high]))
    assert low < run.truth.minimum_h < high
    assert rate == pytest.approx([1.02 * run.truth.minimum_rate_per_h] * 2, rel=2e-4)


def test_a_thermocouple_that_shows_too_much_makes_a_slower_specimen_look_right() -> None:
    """Held at an indicated set point the specimen is colder: Arrhenius says by how much it is slower."""
    run = _theta(thermocouples=(Thermocouple("mid", offset_k=2.0),), activation_energy_j_per_mol=330e3)
    k = 980.0 + 273.15
    expected = math.exp(-330e3 / 8.314462618 * (1.0 / (k - 2.0) - 1.0 / k))
    assert best.rate_as_indicated(run) == pytest.approx(run.truth.minimum_rate_per_h * expected, rel=1e-12)


def test_levels_that_share_work_conclude_what_runs_from_the_start_conclude() -> None:
    """A looser level has moved no stage where a stricter one begins; else the plot would be of another
    detector."""
    shares = (0.2, 0.005, 1e-6)
    moved = 0
    for index in (7, 17):
        run = simulate(draw(FRAME, 3, index))
        row = score.score(run, RULES, index, shares)
        for level in row["levels"]:
            alone = score.score(run, replace(RULES, false_share=level["false_share"]), index, ())
            assert (alone["true_h"], alone["false"]) == (level["true_h"], level["false"])
        moved += len({level["true_h"] for level in row["levels"]}) > 1
    assert moved > 0, "no rig on which the level matters: nothing was tested"


def test_the_score_concludes_what_one_block_of_all_scans_concludes() -> None:
    """Scans are fed from look to look to see the evidence; findings do not depend on cuts."""
    run = simulate(draw(FRAME, 3, 0))
    row = score.score(run, RULES, 0, ())
    block = score.block_of(run).cut(0, row["scans"])
    _, said = follow.follow(follow.begin(RULES), RULES, block)
    at = [float(block.t_s[c.scan]) / 3600.0 for c in said if (c.kind, c.key) == ("stage", "tertiary")]
    assert row["detected_h"] == at


def test_a_detection_before_the_turn_is_false_and_one_after_it_true() -> None:
    """The turn of the true rate is the line between them; a rig that never turns has only false ones."""
    run = _theta()
    block, turn = score.block_of(run), run.truth.minimum_h
    early, late = (int(np.searchsorted(block.t_s, h * 3600.0)) for h in (turn - 5.0, turn + 5.0))
    said = [follow.Conclusion(i, 0, "stage", "tertiary", {}) for i in (early, late)]
    at, true_h, false = score.detections(said, block, turn)
    assert (true_h, false) == (at[1], True)
    assert score.detections(said[1:], block, turn) == (at[1:], at[1], False)
    assert score.detections(said[1:], block, None) == (at[1:], None, True)


def _row(index: int, **more: object) -> dict[str, object]:
    base: dict[str, object] = {
        "index": index, "turns": True, "ruptured": True, "rises": True, "seen_h": 100.0, "min_h": 40.0,
        "first_h": None, "offset_h": 90.0, "end_h": 100.0, "limit_h": 60.0, "true_h": 70.0, "false": False,
        "onset": [35.0, 45.0], "levels": [], "min_rate": 1e-5, "indicated_rate": 1.01e-5, "run_rate": 1e-5,
        "best_error": 1e-7, "best_bias": 0.0,
        "least": {"rate_per_h": 2e-5, "low_per_h": 1.98e-5, "high_per_h": 2.06e-5,
                                      "corrected_rate_per_h": 1.01e-5},
    }  # fmt: skip
    return {**base, **more}


def test_the_figures_are_those_worked_out_by_hand() -> None:
    """Five rows made up so that each figure is plain: one false and late, one missed, one unseen."""
    rows = [
        _row(0),
        _row(1, false=True, true_h=95.0),
        _row(2, true_h=None, onset=None),
        _row(3, true_h=None, onset=None, seen_h=50.0),
        _row(4, true_h=80.0, onset=[50.0, 60.0]),
    ]
    f = table.figures(rows[::-1])
    assert (f["rigs"], f["false"]["count"], f["must_detect"], f["missed"], f["after_offset"]) == (
        5,
        1,
        4,
        1,
        1,
    )
    assert f["delay_h"] == {"of": 3, "median": 40.0, "high_90": 55.0}
    assert f["delay_over_best"] == {"of": 4, "median": 2.0, "high_90": None}  # the missed one is infinite
    assert f["onset_interval_holds"]["count"] == 2
    least = f["least_rate"]
    assert least["error"]["median"] == pytest.approx(0.01)
    assert least["error_over_best_standard_error"]["median"] == 0.0  # it hit what can be known
    # corrected to 1.01e-5, its interval 0.9999e-5 .. 1.0403e-5: holds the truth at the true set point
    assert least["interval_holds"]["count"] == least["interval_holds_allowing"]["count"] == 3
