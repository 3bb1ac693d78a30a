"""Creep curves against constructed check values and against themselves."""

from __future__ import annotations

import math

import numpy as np
import pytest

from simulator.creep import (
    Avrami,
    ConstantLoad,
    Curve,
    ExponentialPrimary,
    ExponentialTertiary,
    Incubation,
    Jerky,
    Kachanov,
    Logarithmic,
    Omega,
    PowerOfTime,
    Steady,
    Sum,
    Theta,
    curve_from_json,
    curve_to_json,
    time_of_strain_h,
)
from simulator.onset import curve_events, equivalent_time_h

THETA = Theta(0.010, 0.010, 0.005, 0.002)
KACHANOV = Kachanov.from_constants(1e-15, 5.0, 1e-13, 4.0, 7.0, 100.0)
OMEGA = Omega(1e-5, 50.0)
CURVES: list[Curve] = [
    Steady(2e-5),
    ExponentialPrimary(0.004, 0.03),
    PowerOfTime(2e-4, 1.0 / 3.0, 0.05),
    PowerOfTime(1e-9, 3.0),
    Logarithmic(0.001, 2.0),
    ExponentialTertiary(0.001, 0.004),
    THETA,
    Kachanov(2e-5, 5.0, 7.0, 900.0),
    Kachanov(2e-5, 8.462, 7.346, 900.0),
    Kachanov(2e-5, 8.0, 7.0, 900.0),
    Omega(2e-5, 60.0),
    Incubation(2e-6, 2e-5, 0.05),
    Avrami(0.002, 300.0, 2.5, early=True),
    Sum((ExponentialPrimary(0.003, 0.02), Omega(1e-5, 80.0))),
    Jerky(Sum((ExponentialPrimary(0.003, 0.02), Steady(1e-5))), 8e-4),
    ConstantLoad(Steady(2e-5), 5.0),
    ConstantLoad(Steady(2e-5), 1.0),
]


@pytest.mark.parametrize("curve", CURVES, ids=lambda c: c.family)
def test_the_rate_is_the_derivative_of_the_strain(curve: Curve) -> None:
    """A closed form for one of the two with a slip in it would be a false truth for every campaign."""
    t = np.linspace(1.0, 700.0, 4001)
    h = 1e-4
    numeric = (curve.strain(t + h) - curve.strain(t - h)) / (2.0 * h)
    assert np.allclose(numeric, curve.rate(t), rtol=2e-5, atol=1e-10)
    assert float(curve.strain(0.0)) == 0.0


@pytest.mark.parametrize("curve", CURVES, ids=lambda c: c.family)
def test_a_curve_survives_its_json(curve: Curve) -> None:
    """Scenario files and campaign records carry curves as plain JSON values."""
    assert curve_from_json(curve_to_json(curve)) == curve


def test_theta_projection_gives_the_constructed_table() -> None:
    """Constructed set th1 = 0.010, th2 = 0.010/h, th3 = 0.005, th4 = 0.002/h, worked out beforehand."""
    t = [0.0, 50.0, 100.0, 200.0, 326.0019171, 500.0, 1000.0, 1500.0]
    strain = [
        0.0,
        0.0044605480,
        0.0074282194,
        0.0111057707,
        0.0142130389,
        0.0185240297,
        0.0419448265,
        0.1054276816,
    ]
    rate = [
        1.1e-4, 7.1704775152e-5, 4.9001971699e-5, 2.8451775300e-5, 2.3032597244e-5, 2.7856612984e-5,
        7.3895100982e-5, 2.0085539982e-4,
    ]  # fmt: skip
    assert np.allclose(THETA.strain(t), strain, rtol=0, atol=6e-11)
    assert np.allclose(THETA.rate(t), rate, rtol=1e-10, atol=0)


def test_theta_projection_has_its_events_where_they_were_worked_out() -> None:
    """The three definitions of onset differ widely on one curve: 326, 404 and 673 h."""
    found = curve_events(THETA, 2000.0)
    assert THETA.minimum_h == pytest.approx(326.0019171, abs=1e-6)
    assert found.minimum_h == pytest.approx(326.0019171, abs=1e-4)
    assert found.minimum_rate_per_h == pytest.approx(2.3032597244e-5, rel=1e-9)
    assert found.rise_5_percent_h == pytest.approx(403.6442, abs=1e-3)
    assert found.offset_0p2_h == pytest.approx(673.4585, abs=1e-3)
    assert found.first_rise_h == found.minimum_h
    assert float(THETA.strain(673.4585)) == pytest.approx(0.0242158666, abs=1e-9)
    assert time_of_strain_h(THETA, 0.20) == pytest.approx(1831.7808, abs=1e-4)


def test_continuum_damage_gives_the_constructed_table() -> None:
    """Kachanov 1958, Rabotnov 1969 with A 1E-15, n 5, B 1E-13, chi 4, phi 7 at 100: worked out beforehand."""
    assert KACHANOV.rupture_h == pytest.approx(12500.0, rel=1e-12)
    t = np.array([0.25, 0.5, 0.75, 0.9, 0.99]) * KACHANOV.rupture_h
    damage = [0.0353213700, 0.0829959568, 0.1591035847, 0.2501057907, 0.4376586748]
    strain = [0.0340884598, 0.0762981958, 0.1351321475, 0.1927678322, 0.2740573530]
    ratio = [1.1969794940, 1.5422108254, 2.3784142300, 4.2169650343, 17.7827941004]
    assert np.allclose(KACHANOV.damage(t), damage, rtol=0, atol=6e-11)
    assert np.allclose(KACHANOV.strain(t), strain, rtol=0, atol=6e-11)
    assert np.allclose(KACHANOV.rate(t) / 1e-5, ratio, rtol=1e-10, atol=0)
    found = curve_events(KACHANOV, KACHANOV.rupture_h)
    assert found.rise_5_percent_h == pytest.approx(938.688, abs=1e-3)
    assert found.offset_0p2_h == pytest.approx(2655.947, abs=1e-3)


def test_damage_whose_strain_diverges_matches_lives_from_memory() -> None:
    """P91 at 650 C (constants from memory): 1 + phi < n, a strain without bound at rupture."""
    for stress, life in ((70.0, 1008.1), (82.0, 344.35), (93.0, 146.51), (100.0, 89.51)):
        curve = Kachanov.from_constants(1.092e-20, 8.462, 2.952e-16 / 8.346, 6.789, 7.346, stress)
        assert curve.rupture_h == pytest.approx(life, rel=1e-4)
        assert math.isfinite(float(curve.strain(curve.rupture_h)))


def test_omega_gives_the_constructed_table() -> None:
    """API 579-1 annex 10B law with rate0 = 1E-5/h, Omega = 50: closed forms worked out beforehand."""
    assert OMEGA.end_h == pytest.approx(2000.0)
    assert np.allclose(
        OMEGA.strain([1000.0, 1800.0, 1980.0]), [0.0138629436, 0.0460517019, 0.0921034037], atol=6e-11
    )
    assert np.allclose(OMEGA.rate([1000.0, 1800.0, 1980.0]), [2e-5, 1e-4, 1e-3], rtol=1e-12)
    found = curve_events(OMEGA, 2000.0)
    assert found.offset_0p2_h == pytest.approx(766.366, abs=1e-3)
    assert found.rise_5_percent_h == pytest.approx(95.2381, abs=1e-4)


def test_a_wandering_furnace_bends_time_as_arrhenius_says() -> None:
    """Published ratio: Q 300 kJ/mol at 600 C, +3 C multiplies the rate by 1.15199, -3 C by 0.86721."""
    t = np.array([0.0, 10.0, 20.0])
    for offset, ratio in ((3.0, 1.15199), (-3.0, 0.86721), (0.0, 1.0)):
        bent = equivalent_time_h(t, np.full(3, 600.0 + offset), 600.0, 300e3)
        assert np.allclose(bent, t * ratio, rtol=5e-6)


def test_inverse_primary_rises_and_its_events_do_not_count_that_rise() -> None:
    """A rise before any established fall is incubation, not tertiary creep."""
    rising = Incubation(2e-6, 2e-5, 0.1)
    assert np.all(np.diff(rising.rate(np.linspace(0.0, 60.0, 50))) > 0.0)
    assert curve_events(rising, 1000.0).rise_5_percent_h is None
    hump = Sum((Avrami(0.002, 60.0, 2.0, early=True), ExponentialTertiary(0.002, 0.003), Steady(1e-5)))
    found = curve_events(hump, 1500.0)
    assert found.minimum_h > 100.0
    assert found.offset_0p2_h is not None


def test_jerky_creep_keeps_to_its_envelope_and_is_judged_by_it() -> None:
    """Its jumps are real strain; they must not move the true onset."""
    t = np.linspace(0.0, 1500.0, 3000)
    jerky = Jerky(THETA, 5e-4, sharpness=0.9, seed=3)
    off = jerky.strain(t) - THETA.strain(t)
    assert 1e-4 < float(np.abs(off).max()) < 2e-3
    assert np.all(np.diff(jerky.strain(t)) >= 0.0)
    assert curve_events(jerky, 1500.0) == curve_events(THETA, 1500.0)


def test_constant_load_equals_a_stepwise_integration() -> None:
    """d(strain)/dt = rate (1 + strain)^n, integrated by small steps as an independent check."""
    curve = ConstantLoad(THETA, 5.0)
    strain, dt = 0.0, 0.05
    for i in range(int(900.0 / dt)):
        middle = strain + 0.5 * dt * float(THETA.rate(i * dt)) * (1.0 + strain) ** 5.0
        strain += dt * float(THETA.rate((i + 0.5) * dt)) * (1.0 + middle) ** 5.0
    assert float(curve.strain(900.0)) == pytest.approx(strain, rel=1e-7)


@pytest.mark.parametrize(
    ("raw", "message"),
    [
        ({"family": "spline"}, "creep.family: got 'spline'"),
        ({"family": "omega", "rate0_per_h": 1e-5}, "creep.omega: missing"),
        ({"family": "omega", "rate0_per_h": 1e-5, "omega": 50, "q": 1}, "creep.q: unknown"),
        (
            {"family": "sum", "parts": [{"family": "steady", "rate_per_h": "fast"}]},
            r"creep.parts\[0\].rate_per_h",
        ),
    ],
)
def test_a_wrong_curve_is_refused_by_place(raw: dict[str, object], message: str) -> None:
    """A scenario file is written by hand; its mistakes must be found from the message."""
    with pytest.raises(ValueError, match=message):
        curve_from_json(raw)
