"""Families of creep curves, each drawn from distributions, scaled to a life.

``draw_curve`` picks a family by weight and returns the curve, its label, the life (None if the test
is stopped unbroken) and the duration. Shapes are drawn in shares of life, so that nothing here has a
time scale of its own. Ranges without a named source are common practice, no source.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np

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
)
from simulator.onset import curve_events

Rng = np.random.Generator


@dataclass(frozen=True)
class Drawn:
    """A drawn curve: what breaks it (life at the set point, None for a run-out) and when the record stops."""

    curve: Curve
    kind: str
    rupture_h: float | None
    duration_h: float


def log_uniform(rng: Rng, low: float, high: float) -> float:
    """Return a number whose logarithm is uniform between those of ``low`` and ``high``."""
    return float(math.exp(rng.uniform(math.log(low), math.log(high))))


def log_normal(rng: Rng, median: float, sigma: float, low: float, high: float) -> float:
    """Return a log-normal number (``sigma`` of its natural logarithm), clipped to [low, high]."""
    return float(min(max(median * math.exp(sigma * rng.standard_normal()), low), high))


def _final_strain(rng: Rng) -> float:
    """Strain at rupture: 1 % to 60 % is what measured curves end at, about 10 % is the middle."""
    return log_normal(rng, 0.10, 0.9, 0.01, 0.60)


def _theta(rng: Rng, life_h: float, low: float, high: float) -> Theta:
    """A theta curve whose least rate lies at ``low``..``high`` of life; redrawn until it does."""
    strain = _final_strain(rng)
    while True:
        fast = log_uniform(rng, 6.0, 40.0)
        slow = float(rng.uniform(2.0, 7.0))
        primary = strain * log_uniform(rng, 0.01, 0.3)
        tertiary = (strain - primary) / math.expm1(slow)
        at = math.log(primary * fast**2 / (tertiary * slow**2)) / (fast + slow)
        if low <= at <= high:
            return Theta(primary, fast / life_h, tertiary, slow / life_h)


def _primary(rng: Rng, life_h: float, amount: float) -> Curve:
    """Primary creep of McVetty's or of Andrade's form, over with the first 2-15 % of life."""
    if rng.random() < 0.6:
        return ExponentialPrimary(amount, 1.0 / (life_h * log_uniform(rng, 0.01, 0.08)))
    share = 0.15 ** (1.0 / 3.0)
    return PowerOfTime(amount / (life_h ** (1.0 / 3.0) * share), 1.0 / 3.0, 2e-4 * life_h)


def _theta_projection(rng: Rng, life_h: float) -> tuple[Curve, float]:
    return _theta(rng, life_h, 0.08, 0.55), life_h


def _no_plateau(rng: Rng, life_h: float) -> tuple[Curve, float]:
    """Least rate at 12-18 % of life, as on measured nickel single crystals.

    Theta, Graham & Walles (a t^(1/3) + f t^3), or damage whose rate goes as (1 - t/tr)^-p with p 1.3..2.4
    behind a short primary: that one runs through two decades of rate, as single crystals do.
    """
    pick = rng.random()
    if pick < 0.4:
        return _theta(rng, life_h, 0.12, 0.18), life_h
    if pick < 0.75:
        return _runaway(rng, life_h), life_h
    at = float(rng.uniform(0.12, 0.18))
    rise = at ** (-8.0 / 3.0) / 27.0
    a = _final_strain(rng) / (1.0 + rise)
    cube = PowerOfTime(a * rise / life_h**3, 3.0)
    return Sum((PowerOfTime(a / life_h ** (1.0 / 3.0), 1.0 / 3.0, 1e-4 * life_h), cube)), life_h


def _runaway(rng: Rng, life_h: float) -> Curve:
    """Damage with n > 1 + phi, cut off before its strain diverges; least rate put at 12-18 % of life."""
    p, phi = float(rng.uniform(1.3, 2.4)), 7.0
    end = life_h / float(rng.uniform(0.95, 0.99))
    unit = Kachanov(1.0 / end, p * (1.0 + phi), phi, end)
    rate0 = _final_strain(rng) / float(unit.strain(life_h)) / end
    fast = float(rng.uniform(12.0, 30.0)) / life_h
    at = float(rng.uniform(0.12, 0.18)) * life_h
    # the slopes of the falling and of the rising rate cancel there
    rising = rate0 * p / end * (1.0 - at / end) ** (-p - 1.0)
    amount = rising / (fast**2 * math.exp(-fast * at))
    return Sum((ExponentialPrimary(amount, fast), Kachanov(rate0, p * (1.0 + phi), phi, end)))


def _damage(rng: Rng, life_h: float) -> tuple[Curve, float]:
    """Kachanov-Rabotnov with n 3..9 and phi n..n+8 behind a primary stage; breaks at 98-99.9 % of tr."""
    n = float(rng.uniform(3.0, 9.0))
    phi = n + float(rng.uniform(0.0, 8.0))
    strain = _final_strain(rng)
    end = life_h / float(rng.uniform(0.98, 0.999))
    rate0 = strain * (1.0 + phi - n) / (1.0 + phi) / end
    primary = _primary(rng, life_h, strain * log_uniform(rng, 0.01, 0.15))
    return Sum((primary, Kachanov(rate0, n, phi, end))), life_h


def _omega(rng: Rng, life_h: float) -> tuple[Curve, float]:
    """Omega 15..200 (API 579-1 tables give 3..35 at design stresses, more where embrittled) and a primary."""
    omega = log_uniform(rng, 15.0, 200.0)
    end = life_h / float(rng.uniform(0.97, 0.999))
    primary = _primary(rng, life_h, log_uniform(rng, 0.03, 0.5) / omega)
    return Sum((primary, Omega(1.0 / (omega * end), omega))), life_h


def _long_plateau(rng: Rng, life_h: float) -> tuple[Curve, float]:
    """McVetty or Andrade primary, a long steady stage, and tertiary in the last third of life."""
    strain = _final_strain(rng)
    steady = strain * float(rng.uniform(0.15, 0.6))
    k = float(rng.uniform(12.0, 30.0))
    primary = ExponentialPrimary(
        strain * log_uniform(rng, 0.02, 0.2), 1.0 / (life_h * log_uniform(rng, 0.01, 0.06))
    )
    late = ExponentialTertiary((strain - steady) * math.exp(-k), k / life_h)
    return Sum((primary, Steady(steady / life_h), late)), life_h


def _late_peak(rng: Rng, life_h: float) -> tuple[Curve, float]:
    """The rate rises to a peak at 65-90 % of life and falls again (a transformation strain), then rupture."""
    strain = _final_strain(rng)
    share = float(rng.uniform(0.3, 0.7))
    bump = Avrami(strain * share, life_h * float(rng.uniform(0.68, 0.95)), float(rng.uniform(3.5, 6.0)))
    primary = ExponentialPrimary(
        strain * log_uniform(rng, 0.02, 0.15), 1.0 / (life_h * log_uniform(rng, 0.01, 0.05))
    )
    return Sum((primary, Steady(strain * (1.0 - share) / life_h), bump)), life_h


def _inverse_then_tertiary(rng: Rng, life_h: float) -> tuple[Curve, float]:
    """The rate rises 1.2- to 2.5-fold within 3-12 % of life, falls to a plateau, then turns tertiary."""
    strain = _final_strain(rng)
    steady = strain * float(rng.uniform(0.2, 0.6)) / life_h
    k = float(rng.uniform(6.0, 20.0))
    late = ExponentialTertiary((strain - steady * life_h) * math.exp(-k), k / life_h)
    return Sum((_hump(rng, life_h, steady), Steady(steady), late)), life_h


def _hump(rng: Rng, life_h: float, steady_per_h: float) -> Avrami:
    """An early transformation strain that lifts the rate to 1.2-2.5 x ``steady_per_h`` at its peak."""
    m = float(rng.uniform(1.6, 2.4))
    tau = life_h * float(rng.uniform(0.03, 0.12))
    unit = Avrami(1.0, tau, m, early=True)
    amount = float(rng.uniform(0.2, 1.5)) * steady_per_h / float(unit.rate(unit.incubation_h))
    return Avrami(amount, tau, m, early=True)


def _several_minima(rng: Rng, life_h: float) -> tuple[Curve, float]:
    """A long plateau with a hump of 5-30 % of the rate on it, as recrystallisation makes: two minima."""
    curve, life = _long_plateau(rng, life_h)
    tau = life_h * float(rng.uniform(0.25, 0.5))
    unit = Avrami(1.0, tau, 5.0)
    peak = float(unit.rate(tau))
    least = curve_events(curve, life).minimum_rate_per_h
    return Sum((curve, Avrami(float(rng.uniform(0.05, 0.3)) * least / peak, tau, 5.0))), life


def _jerky(rng: Rng, life_h: float) -> tuple[Curve, float]:
    """Staircase creep on a theta curve."""
    base = _theta(rng, life_h, 0.1, 0.45)
    return _with_stairs(rng, base, life_h), life_h


def _with_stairs(rng: Rng, base: Curve, life_h: float) -> Jerky:
    """Stairs of 100-800 microstrain, at least eight of them within the first 30 % of life."""
    step = min(log_uniform(rng, 1e-4, 8e-4), float(base.strain(0.3 * life_h)) / 8.0)
    return Jerky(base, step, float(rng.uniform(0.3, 0.9)), int(rng.integers(1 << 30)))


def _to_steady(rng: Rng, life_h: float) -> Curve:
    """Garofalo: exponential primary into a steady rate."""
    strain = log_normal(rng, 0.01, 0.8, 0.002, 0.10)
    primary = ExponentialPrimary(
        strain * float(rng.uniform(0.1, 0.7)), 1.0 / (life_h * log_uniform(rng, 0.03, 0.4))
    )
    return Sum((primary, Steady(strain / life_h)))


def _andrade(rng: Rng, life_h: float) -> Curve:
    """Andrade: cube root of time and a steady rate that may be small."""
    strain = log_normal(rng, 0.01, 0.8, 0.002, 0.10)
    root = PowerOfTime(strain / life_h ** (1.0 / 3.0), 1.0 / 3.0, 1e-4 * life_h)
    return Sum((root, Steady(strain * log_uniform(rng, 0.02, 1.0) / life_h)))


def _logarithmic(rng: Rng, life_h: float) -> Curve:
    """Logarithmic creep: below 0.4 of the melting temperature."""
    tau = life_h * log_uniform(rng, 1e-4, 0.05)
    return Logarithmic(log_normal(rng, 0.004, 0.8, 0.001, 0.05) / math.log1p(life_h / tau), tau)


def _incubation(rng: Rng, life_h: float) -> Curve:
    """Li: the rate rises from 20-80 % of the steady one within the first tenth and stays there."""
    steady = log_normal(rng, 0.015, 0.7, 0.003, 0.10) / life_h
    return Incubation(steady * float(rng.uniform(0.2, 0.8)), steady, float(rng.uniform(50.0, 150.0)) / life_h)


def _hump_to_steady(rng: Rng, life_h: float) -> Curve:
    """Inverse primary that falls to a plateau and stays there."""
    steady = log_normal(rng, 0.015, 0.7, 0.003, 0.10) / life_h
    return Sum((_hump(rng, life_h, steady), Steady(steady)))


def _jerky_steady(rng: Rng, life_h: float) -> Curve:
    return _with_stairs(rng, _to_steady(rng, life_h), life_h)


TURNING: Final[Mapping[str, tuple[float, Callable[[Rng, float], tuple[Curve, float]]]]] = {
    "theta": (16.0, _theta_projection),
    "no_plateau": (8.0, _no_plateau),
    "damage": (11.0, _damage),
    "omega": (10.0, _omega),
    "long_plateau": (9.0, _long_plateau),
    "late_peak": (3.0, _late_peak),
    "inverse_then_tertiary": (4.0, _inverse_then_tertiary),
    "several_minima": (2.0, _several_minima),
    "jerky": (2.0, _jerky),
}
"""Families that turn tertiary, with weights; together 65 of 100."""
NEVER: Final[Mapping[str, tuple[float, Callable[[Rng, float], Curve]]]] = {
    "to_steady": (10.0, _to_steady),
    "andrade": (6.0, _andrade),
    "logarithmic": (4.0, _logarithmic),
    "incubation": (3.0, _incubation),
    "hump_to_steady": (4.0, _hump_to_steady),
    "jerky_steady": (2.0, _jerky_steady),
}
"""Families that never turn, with weights; together 29 of 100. The rest are turning ones stopped too early."""
STOPPED_BEFORE: Final = 6.0
"""Weight of turning families whose record ends before their least rate: the usual run-out."""
STOPPED_AFTER_SHARE: Final = 0.12
"""Share of turning tests that are unloaded between the least rate and rupture (microscopy, time limit)."""


def draw_curve(rng: Rng, life_h: float) -> Drawn:
    """Draw a curve scaled to ``life_h`` [h]; for the families that never turn that is the time limit."""
    weights = [w for w, _ in TURNING.values()] + [w for w, _ in NEVER.values()] + [STOPPED_BEFORE]
    names = [*TURNING, *NEVER, "stopped_before"]
    p = np.array(weights) / sum(weights)
    name = names[int(rng.choice(len(names), p=p))]
    if name in NEVER:
        return Drawn(NEVER[name][1](rng, life_h), name, None, life_h)
    if name == "stopped_before":
        share = np.array([w for w, _ in TURNING.values()])
        family = list(TURNING)[int(rng.choice(len(share), p=share / share.sum()))]
        curve, life = TURNING[family][1](rng, life_h)
        found = curve_events(curve, life)
        least = found.minimum_h if found.first_rise_h is None else found.first_rise_h
        duration = max(least, 0.05 * life) * float(rng.uniform(0.4, 0.95))
        return Drawn(curve, f"stopped_before/{family}", None, duration)
    curve, life = TURNING[name][1](rng, life_h)
    if name in ("theta", "long_plateau", "no_plateau") and rng.random() < 0.4:
        loaded = ConstantLoad(curve, float(rng.uniform(3.0, 8.0)))
        if loaded.end_h > 1.02 * life:
            curve = loaded
    if rng.random() < STOPPED_AFTER_SHARE:
        least = curve_events(curve, life).minimum_h
        return Drawn(curve, name, None, least + (life - least) * float(rng.uniform(0.2, 0.95)))
    return Drawn(curve, name, life, 1.3 * life)
