"""Forecasts against curves whose end is known exactly, and refusals where no end can be known."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from watch_blocks import rules_for

from daq.codec import decode_state, encode_state
from daq.core import forecast, horizon
from daq.core.laws import EXPONENTIAL, SINGULAR, STEADY_EXPONENTIAL
from daq.core.rules import Limits
from daq.records import FloatArray

Curve = tuple[FloatArray, FloatArray, FloatArray]
RULES = rules_for(["a"], Limits(milestones=(0.01, 0.02, 0.05, 0.2)))


def curve_of(
    strain: Callable[[FloatArray], FloatArray], now_h: float, noise: float = 1e-7, seed: int = 0
) -> Curve:
    """Block means as the ladder has them: wide long ago, narrow near now; strain with white noise."""
    edges = [now_h]
    while edges[-1] > 0.004 * now_h:
        edges.append(edges[-1] - max(0.003 * now_h, 0.03 * (now_h - edges[-1])))
    edge = np.array(edges[::-1])
    edge = edge[edge >= 0.0]
    inside = (np.arange(20) + 0.5) / 20.0
    t = edge[:-1, None] + inside * np.diff(edge)[:, None]
    mean = strain(t).mean(axis=1) + noise * np.random.default_rng(seed).standard_normal(t.shape[0])
    return t.mean(axis=1), mean, np.diff(strain(edge)) / np.diff(edge)


def look(curve: Curve, stage: str = "tertiary", rules: Any = RULES) -> dict[str, dict[str, Any]]:
    _, said = forecast.look(forecast.begin(), rules, curve, stage, float(curve[0][-1]))
    return {f["of"]: f for f in said}


def omega(t: FloatArray) -> FloatArray:
    """MPC Omega with rate0 = 1E-5 /h, Omega = 50: rupture at 1/(rate0 Omega) = 2000 h (API 579-1)."""
    return np.asarray(-np.log1p(-t / 2000.0) / 50.0)


def theta(t: FloatArray) -> FloatArray:
    """Theta projection (Evans & Wilshire), a constructed set."""
    return np.asarray(0.010 * -np.expm1(-0.010 * t) + 0.005 * np.expm1(0.002 * t))


def voight(a: float) -> Callable[[FloatArray], FloatArray]:
    """d(rate)/dt = Af rate^a with rate0 = 1E-5 /h and failure at 2000 h (Voight 1988)."""
    p = 1.0 / (a - 1.0)

    def strain(t: FloatArray) -> FloatArray:
        x = 1.0 - t / 2000.0
        if abs(p - 1.0) < 1e-9:
            return np.asarray(-1e-5 * 2000.0 * np.log(x))
        return np.asarray(1e-5 * 2000.0 / (p - 1.0) * (x ** (1.0 - p) - 1.0))

    return strain


def kachanov(t: FloatArray) -> FloatArray:
    """Kachanov-Rabotnov, a constructed set: A 1E-15, n 5, chi 4, phi 7, 100 MPa; rupture at 12 500 h."""
    q = 0.375
    return np.asarray(1e-5 * 12_500.0 / q * (1.0 - (1.0 - t / 12_500.0) ** q))


def singular_end(curve: Curve) -> tuple[float, float]:
    """End of the singular law [h], and its power, by the weighted cells."""
    t, e, rate = curve
    scans = np.gradient(t)
    fitted = forecast.fit_laws((t, e, rate, scans), forecast.least_of(t, e, scans))
    assert fitted is not None
    p, posts = fitted
    post = posts[SINGULAR]
    left = float(np.exp(post.weight @ np.log(post.first)))
    return float(p.t_h[-1]) + left, float(np.exp(post.weight @ np.log(post.second)))


@pytest.mark.parametrize(("now_h", "left_h"), [(1000.0, 1000.0), (1800.0, 200.0), (1980.0, 20.0)])
def test_omega_curve_has_its_known_time_left(now_h: float, left_h: float) -> None:
    """1000, 200 and 20 h at half, 0.9 and 0.99 of life (closed form of API 579-1)."""
    curve = curve_of(omega, now_h)
    end, power = singular_end(curve)
    assert end - now_h == pytest.approx(left_h, rel=0.05)
    assert power == pytest.approx(1.0, rel=0.1)
    rupture = look(curve)["rupture"]
    assert rupture["coverage"] == 0.9
    assert rupture["low_h"] < 2000.0 < rupture["high_h"]
    assert rupture["median_h"] - now_h == pytest.approx(left_h, rel=0.2)


@pytest.mark.parametrize("a", [1.5, 1.8, 2.0, 2.2])
def test_a_free_exponent_finds_failure_where_a_straight_inverse_rate_line_is_biased(a: float) -> None:
    """Window to 1600 h, true failure at 2000 h; the line gives 1672, 1868, 2000, 2133 h (computed)."""
    curve = curve_of(voight(a), 1600.0, noise=1e-8)
    end, power = singular_end(curve)
    assert end == pytest.approx(2000.0, rel=0.01)
    assert power == pytest.approx(1.0 / (a - 1.0), rel=0.06)
    t = np.linspace(1000.0, 1600.0, 601)
    rate = 1e-5 * (1.0 - t / 2000.0) ** (-1.0 / (a - 1.0))
    slope, level = np.polyfit(t, 1.0 / rate, 1)
    known = {1.5: 1672.1, 1.8: 1867.7, 2.0: 2000.0, 2.2: 2133.0}[a]
    assert -level / slope == pytest.approx(known, abs=2.0)
    if a > 1.5:
        rupture = look(curve)["rupture"]
        assert rupture["low_h"] < 2000.0 < rupture["high_h"]


@pytest.mark.parametrize("now_h", [700.0, 1000.0, 1500.0])
def test_exponential_tertiary_tells_no_rupture(now_h: float) -> None:
    """One over an exponential never reaches zero in finite time: an inverse-rate forecast must be refused."""
    for noise in (1e-7, 2e-5):
        rupture = look(curve_of(theta, now_h, noise))["rupture"]
        assert "low_h" not in rupture
        assert "exponential" in rupture["none_because"] or "equally well" in rupture["none_because"]


@pytest.mark.parametrize("share", [0.75, 0.9])
@pytest.mark.parametrize("noise", [1e-7, 1e-5])
def test_damage_curve_is_foretold(share: float, noise: float) -> None:
    """Rupture at 12 500 h and power n/(1+phi) = 0.625 by the closed form of the constructed set."""
    now = 12_500.0 * share
    curve = curve_of(kachanov, now, noise)
    end, power = singular_end(curve)
    assert end - now == pytest.approx(12_500.0 - now, rel=0.1)
    assert power == pytest.approx(0.625, rel=0.15)
    rupture = look(curve)["rupture"]
    assert rupture["low_h"] < 12_500.0 < rupture["high_h"]


def test_theta_curve_gives_its_milestone_and_offset() -> None:
    """Strain 0.2 at 1831.78 h and the 0.2 % offset at 673.46 h (closed form, computed)."""
    said = look(curve_of(theta, 1500.0, 1e-6))
    strain = said["strain_20_percent"]
    assert strain["low_h"] < 1831.7808 < strain["high_h"]
    assert strain["median_h"] == pytest.approx(1831.7808, rel=0.01)
    assert "offset_0p2_percent" not in said  # it has been reached long ago
    offset = look(curve_of(theta, 560.0, 1e-6))["offset_0p2_percent"]
    assert offset["low_h"] < 673.4585 < offset["high_h"]
    assert offset["median_h"] == pytest.approx(673.4585, rel=0.03)


def test_before_tertiary_creep_only_strains_are_foretold() -> None:
    """Nothing in a steady rate says when it will end."""

    def steady(t: FloatArray) -> FloatArray:
        return np.asarray(0.003 * -np.expm1(-t / 60.0) + 6e-6 * t)

    said = look(curve_of(steady, 1000.0, 1e-6), "secondary")
    assert said["rupture"]["none_because"] == "tertiary creep has not been detected (secondary)"
    assert "none_because" in said["offset_0p2_percent"]
    one = said["strain_1_percent"]
    true = (0.01 - 0.003) / 6e-6
    assert one["low_h"] < true < one["high_h"]
    assert one["median_h"] == pytest.approx(true, rel=0.02)
    assert "times the age" in said["strain_5_percent"]["none_because"]


def test_monkman_grant_joins_in_only_where_the_user_gave_a_constant() -> None:
    """Exact products for test curves: Omega law rate0 tr = 1/Omega (closed form)."""
    known = rules_for(["a"], Limits(milestones=()), monkman_grant_constant=0.02, monkman_grant_exponent=1.0)
    curve = curve_of(omega, 1200.0, 2e-5)
    plain, helped = look(curve)["rupture"], look(curve, rules=known)["rupture"]
    assert helped["low_h"] < 2000.0 < helped["high_h"]
    if "low_h" in plain:
        assert helped["high_h"] - helped["low_h"] <= plain["high_h"] - plain["low_h"]
    # an exponential curve tells nothing by itself; there the constant stands alone
    alone = look(
        curve_of(theta, 700.0, 1e-6),
        rules=rules_for(["a"], Limits(milestones=()), monkman_grant_constant=2.3e-5 * 1400.0),
    )["rupture"]
    assert alone["low_h"] < 1400.0 < alone["high_h"]
    assert 700.0 < alone["median_h"] < 2000.0


def test_a_law_that_foretold_badly_loses_weight() -> None:
    """Prequential: what counts is what was said before it was known."""
    tracks = {
        law: forecast.Track(0.0, (100.0, 110.0), (0.01, mean), (1e-5, 1e-5))
        for law, mean in ((SINGULAR, 0.0112), (EXPONENTIAL, 0.0110), (STEADY_EXPONENTIAL, 0.01101))
    }
    t = np.array([100.0, 110.0])
    scored = forecast._score(tracks, t, np.array([0.01, 0.0112]))
    assert scored[SINGULAR].score == 0.0
    assert scored[EXPONENTIAL].score == -forecast.SCORE_MOST
    # too late to be what was foretold: nothing is scored
    assert forecast._score(tracks, np.array([100.0, 150.0]), np.array([0.01, 0.02])) == tracks


def test_the_same_words_are_not_said_twice_and_the_state_keeps() -> None:
    """A look every few per cent of a test's age must not fill the journal with the same forecast."""
    curve = curve_of(omega, 1800.0)
    first, said = forecast.look(forecast.begin(), RULES, curve, "tertiary", 1800.0)
    again, nothing = forecast.look(first, RULES, curve, "tertiary", 1800.0)
    assert {f["of"] for f in said} >= {"rupture", "strain_5_percent", "strain_20_percent"}
    assert nothing == []
    assert forecast.status(again) == forecast.status(first) == [dict(f) for f in said]
    kept = decode_state(encode_state(again))
    assert encode_state(kept) == encode_state(again)


def test_looks_come_closer_as_rupture_does() -> None:
    """A twentieth of the age is half of the time left when nine tenths of life are gone."""
    assert forecast.next_look_h(forecast.begin(), 100.0) == pytest.approx(105.0)
    state, _ = forecast.look(forecast.begin(), RULES, curve_of(omega, 1800.0), "tertiary", 1800.0)
    assert 1815.0 < forecast.next_look_h(state, 1800.0) < 1825.0
    state, _ = forecast.look(forecast.begin(), RULES, curve_of(omega, 1990.0), "tertiary", 1990.0)
    assert forecast.next_look_h(state, 1990.0) == pytest.approx(1990.0 * 1.005)


@pytest.mark.parametrize("scale", [0.01, 100.0])
def test_scaling_time_scales_the_answer(scale: float) -> None:
    """Nothing in a forecast may be tuned in hours."""
    t, e, rate = curve_of(kachanov, 9000.0, 1e-5)
    one = look((t, e, rate))["rupture"]
    other = look((t * scale, e, rate / scale))["rupture"]
    for key in ("low_h", "median_h", "high_h"):
        assert other[key] == pytest.approx(scale * one[key], rel=1e-6)


def test_a_constant_added_to_strain_changes_no_rupture() -> None:
    """The zero of an extensometer is a convention."""
    t, e, rate = curve_of(kachanov, 9000.0, 1e-5)
    one, other = look((t, e, rate))["rupture"], look((t, e + 0.05, rate))["rupture"]
    assert other["median_h"] == pytest.approx(one["median_h"], rel=1e-5)


def test_too_short_a_curve_says_nothing() -> None:
    """Bad input is no reason to invent."""
    t = np.linspace(0.1, 1.0, 8)
    assert look((t, t * 1e-4, np.full(8, 1e-4))) == {}
    t = np.linspace(0.1, 1.0, 40)
    e = np.where(t > 0.3, np.nan, t * 1e-4)
    assert look((t, e, np.full(40, 1e-4))) == {}


def test_weighted_interval_is_the_weighted_interval() -> None:
    """Against numpy's quantiles of a sample repeated by its weights."""
    rng = np.random.default_rng(1)
    x, w = rng.normal(size=400), rng.integers(1, 9, 400)
    found = horizon.interval(horizon.Sample(x, w.astype(float)), 0.9)
    assert np.allclose(found, np.quantile(np.repeat(x, w), [0.05, 0.5, 0.95]), atol=0.02)
