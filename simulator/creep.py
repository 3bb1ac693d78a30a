"""Creep curves of published constitutive forms, as strain and rate over time.

Every curve is a frozen dataclass with ``strain(t_h)`` and ``rate(t_h)``, vectorised and in closed
form. Times are hours under load at the set temperature, strains engineering strains [1], rates
1/h. A furnace that wanders is brought in by ``onset.equivalent_time_h``: the curve is read at the
time that would have done as much at the set temperature.

Small pieces add up (``Sum``): primary by McVetty's exponential, a power of time or a logarithm;
a steady rate; tertiary by an exponential, a power of time, continuum damage or the Omega law;
a transformation strain (Avrami) for rates that rise to a peak and fall; an incubation (Li) for
inverse primary. ``Jerky`` and ``ConstantLoad`` wrap a curve.

Sources, quoted from memory unless CHECKVALUES says otherwise: McVetty 1934; Andrade 1910; Phillips 1905
(logarithmic); de Lacombe 1939 and Graham & Walles 1955 (sums of powers of time); Garofalo 1965 (exponential
plus steady); Evans & Wilshire 1985 (theta projection); Kachanov 1958, Rabotnov 1969 (damage); Prager 1995 and
API 579-1 annex 10B (Omega); Li 1963 (dislocation multiplication); Johnson & Mehl 1939, Avrami 1939.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any, ClassVar, Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

NEARLY: Final = 1.0 - 1e-9
"""Curves that end in a singularity are read no closer to it than this share of their life."""


@dataclass(frozen=True)
class Curve:
    """What every curve offers. ``end_h`` is where the law itself breaks down, or infinity."""

    family: ClassVar[str] = ""

    @property
    def end_h(self) -> float:
        """Return the time of the law's own singularity [h], or infinity."""
        return math.inf

    @property
    def incubation_h(self) -> float:
        """Return the time before which a rising rate is incubation (inverse primary) [h]."""
        return 0.0

    @property
    def envelope(self) -> Curve:
        """Return the smooth curve by which stages are judged; itself unless it is jerky."""
        return self

    def strain(self, t_h: ArrayLike) -> FloatArray:
        """Return the creep strain at ``t_h`` [h], zero at zero; any shape."""
        return self._strain(self._clip(t_h))

    def rate(self, t_h: ArrayLike) -> FloatArray:
        """Return the creep rate [1/h] at ``t_h`` [h]; any shape."""
        return self._rate(self._clip(t_h))

    def _clip(self, t_h: ArrayLike) -> FloatArray:
        return np.clip(np.asarray(t_h, dtype=np.float64), 0.0, self.end_h * NEARLY)

    def _strain(self, t: FloatArray) -> FloatArray:
        raise TypeError(f"{type(self).__name__} has no strain of its own; use one of the families")

    def _rate(self, t: FloatArray) -> FloatArray:
        raise TypeError(f"{type(self).__name__} has no rate of its own; use one of the families")


@dataclass(frozen=True)
class Steady(Curve):
    """A constant rate: secondary creep."""

    family: ClassVar[str] = "steady"
    rate_per_h: float

    def _strain(self, t: FloatArray) -> FloatArray:
        return self.rate_per_h * t

    def _rate(self, t: FloatArray) -> FloatArray:
        return np.full_like(t, self.rate_per_h)


@dataclass(frozen=True)
class ExponentialPrimary(Curve):
    """Primary creep that runs out: amount (1 - exp(-k t)) (McVetty 1934, Garofalo 1965)."""

    family: ClassVar[str] = "exponential_primary"
    amount: float
    per_h: float

    def _strain(self, t: FloatArray) -> FloatArray:
        return -self.amount * np.expm1(-self.per_h * t)

    def _rate(self, t: FloatArray) -> FloatArray:
        return self.amount * self.per_h * np.exp(-self.per_h * t)


@dataclass(frozen=True)
class PowerOfTime(Curve):
    """amount ((t + t0)^m - t0^m), a power of time.

    m = 1/3 is Andrade's primary creep (1910), m = 3 the tertiary term of Graham & Walles (1955); other
    powers after de Lacombe (1939). ``start_h`` > 0 stands for the minutes of loading and keeps the first
    rate finite where m < 1.
    """

    family: ClassVar[str] = "power_of_time"
    amount: float
    exponent: float
    start_h: float = 0.0

    def _strain(self, t: FloatArray) -> FloatArray:
        started: float = self.start_h**self.exponent
        return self.amount * ((t + self.start_h) ** self.exponent - started)

    def _rate(self, t: FloatArray) -> FloatArray:
        floor = 1e-6 if self.exponent < 1.0 else 0.0
        return self.amount * self.exponent * np.maximum(t + self.start_h, floor) ** (self.exponent - 1.0)


@dataclass(frozen=True)
class Logarithmic(Curve):
    """amount ln(1 + t/tau): creep below about 0.4 of the melting temperature (Phillips 1905)."""

    family: ClassVar[str] = "logarithmic"
    amount: float
    tau_h: float

    def _strain(self, t: FloatArray) -> FloatArray:
        return self.amount * np.log1p(t / self.tau_h)

    def _rate(self, t: FloatArray) -> FloatArray:
        return self.amount / (self.tau_h + t)


@dataclass(frozen=True)
class ExponentialTertiary(Curve):
    """amount (exp(k t) - 1), the second half of the theta projection (Evans & Wilshire 1985)."""

    family: ClassVar[str] = "exponential_tertiary"
    amount: float
    per_h: float

    def _strain(self, t: FloatArray) -> FloatArray:
        return self.amount * np.expm1(self.per_h * t)

    def _rate(self, t: FloatArray) -> FloatArray:
        return self.amount * self.per_h * np.exp(self.per_h * t)


@dataclass(frozen=True)
class Theta(Curve):
    """Theta projection: th1 (1 - exp(-th2 t)) + th3 (exp(th4 t) - 1) (Evans & Wilshire 1985)."""

    family: ClassVar[str] = "theta"
    theta1: float
    theta2_per_h: float
    theta3: float
    theta4_per_h: float

    @property
    def minimum_h(self) -> float:
        """Return the time of the least rate [h], zero if the rate rises from the start."""
        a = self.theta1 * self.theta2_per_h**2
        b = self.theta3 * self.theta4_per_h**2
        return max(0.0, math.log(a / b) / (self.theta2_per_h + self.theta4_per_h))

    def _strain(self, t: FloatArray) -> FloatArray:
        return -self.theta1 * np.expm1(-self.theta2_per_h * t) + self.theta3 * np.expm1(self.theta4_per_h * t)

    def _rate(self, t: FloatArray) -> FloatArray:
        falling = self.theta1 * self.theta2_per_h * np.exp(-self.theta2_per_h * t)
        return falling + self.theta3 * self.theta4_per_h * np.exp(self.theta4_per_h * t)


@dataclass(frozen=True)
class Kachanov(Curve):
    """Continuum damage: rate0 (1 - t/tr)^(-n/(1+phi)) (Kachanov 1958, Rabotnov 1969).

    With q = (1 + phi - n)/(1 + phi) the strain is (rate0 tr/q)(1 - (1 - t/tr)^q); q = 0 gives a logarithm
    and q < 0 a strain without bound at tr.
    """

    family: ClassVar[str] = "kachanov"
    rate0_per_h: float
    n: float
    phi: float
    rupture_h: float

    @classmethod
    def from_constants(cls, a: float, n: float, b: float, chi: float, phi: float, stress: float) -> Kachanov:
        """Build from rate = A (s/(1-w))^n and dw/dt = B s^chi/(1-w)^phi, hours, any one unit of stress."""
        return cls(a * stress**n, n, phi, 1.0 / ((1.0 + phi) * b * stress**chi))

    @property
    def end_h(self) -> float:
        """Return the rupture time tr [h]."""
        return self.rupture_h

    def damage(self, t_h: ArrayLike) -> FloatArray:
        """Return w = 1 - (1 - t/tr)^(1/(1+phi))."""
        return 1.0 - self._left(self._clip(t_h)) ** (1.0 / (1.0 + self.phi))

    def _left(self, t: FloatArray) -> FloatArray:
        return 1.0 - t / self.rupture_h

    def _strain(self, t: FloatArray) -> FloatArray:
        q = (1.0 + self.phi - self.n) / (1.0 + self.phi)
        scale = self.rate0_per_h * self.rupture_h
        if abs(q) < 1e-12:
            return -scale * np.log(self._left(t))
        return -scale / q * np.expm1(q * np.log(self._left(t)))

    def _rate(self, t: FloatArray) -> FloatArray:
        return self.rate0_per_h * self._left(t) ** (-self.n / (1.0 + self.phi))


@dataclass(frozen=True)
class Omega(Curve):
    """rate = rate0 exp(Omega strain) (Prager 1995; API 579-1 annex 10B): -ln(1 - Omega rate0 t)/Omega."""

    family: ClassVar[str] = "omega"
    rate0_per_h: float
    omega: float

    @property
    def end_h(self) -> float:
        """Return the rupture time 1/(Omega rate0) [h]."""
        return 1.0 / (self.omega * self.rate0_per_h)

    def _strain(self, t: FloatArray) -> FloatArray:
        return -np.log1p(-t / self.end_h) / self.omega

    def _rate(self, t: FloatArray) -> FloatArray:
        return self.rate0_per_h / (1.0 - t / self.end_h)


@dataclass(frozen=True)
class Incubation(Curve):
    """Inverse primary by dislocation multiplication (Li 1963): the rate goes from rate0 to a steady one.

    rate0/(1 + a (1 - exp(-k t))) with a = (rate0 - steady)/steady; rate0 < steady rises in an S,
    rate0 > steady is an ordinary primary.
    """

    family: ClassVar[str] = "incubation"
    rate0_per_h: float
    steady_per_h: float
    per_h: float

    @property
    def incubation_h(self) -> float:
        """Return the time by which the rate is within 0.1 % of steady [h], zero for a falling rate."""
        if self.rate0_per_h >= self.steady_per_h:
            return 0.0
        return math.log(1000.0 * (self.steady_per_h / self.rate0_per_h - 1.0) + 1.0) / self.per_h

    def _growth(self, t: FloatArray) -> FloatArray:
        a = self.rate0_per_h / self.steady_per_h - 1.0
        return 1.0 - a * np.expm1(-self.per_h * t)

    def _strain(self, t: FloatArray) -> FloatArray:
        return self.steady_per_h * (t + np.log(self._growth(t)) / self.per_h)

    def _rate(self, t: FloatArray) -> FloatArray:
        return self.rate0_per_h / self._growth(t)


@dataclass(frozen=True)
class Avrami(Curve):
    """A transformation strain: amount (1 - exp(-(t/tau)^m)) (Johnson & Mehl, Avrami 1939), m > 1.

    Its rate rises to a peak at tau ((m-1)/m)^(1/m) and falls again. ``early`` marks it as an incubation
    hump: what rises before it has gone is inverse primary. A negative amount contracts.
    """

    family: ClassVar[str] = "avrami"
    amount: float
    tau_h: float
    exponent: float = 2.0
    early: bool = False

    @property
    def incubation_h(self) -> float:
        """Return the time of the peak [h] if ``early``, else zero."""
        m = self.exponent
        return self.tau_h * ((m - 1.0) / m) ** (1.0 / m) if self.early else 0.0

    def _strain(self, t: FloatArray) -> FloatArray:
        return -self.amount * np.expm1(-((t / self.tau_h) ** self.exponent))

    def _rate(self, t: FloatArray) -> FloatArray:
        x = t / self.tau_h
        m = self.exponent
        return self.amount * m / self.tau_h * x ** (m - 1.0) * np.exp(-(x**m))


@dataclass(frozen=True)
class Sum(Curve):
    """Strains of several pieces added; the first singularity ends it."""

    family: ClassVar[str] = "sum"
    parts: tuple[Curve, ...]

    @property
    def end_h(self) -> float:
        """Return the earliest singularity of the parts [h]."""
        return min(p.end_h for p in self.parts)

    @property
    def incubation_h(self) -> float:
        """Return the longest incubation of the parts [h]."""
        return max(p.incubation_h for p in self.parts)

    @property
    def envelope(self) -> Curve:
        """Return the sum of the parts' envelopes."""
        return Sum(tuple(p.envelope for p in self.parts))

    def _strain(self, t: FloatArray) -> FloatArray:
        total = np.zeros_like(t)
        for part in self.parts:
            total = total + part._strain(t)
        return total

    def _rate(self, t: FloatArray) -> FloatArray:
        total = np.zeros_like(t)
        for part in self.parts:
            total = total + part._rate(t)
        return total


@lru_cache(maxsize=64)
def _stair_edges(step: float, seed: int, count: int) -> FloatArray:
    """Edges of ``count`` stairs of gamma-distributed width (shape 4: irregular, never tiny)."""
    widths = np.random.default_rng([seed, 41]).gamma(4.0, step / 4.0, count)
    return np.concatenate([[0.0], np.cumsum(widths)])


@dataclass(frozen=True)
class Jerky(Curve):
    """Staircase creep, as dynamic strain ageing makes it (form: ours; the fact: common practice, no source).

    Strain of the smooth curve is mapped onto stairs of mean width ``step``: a share ``sharpness`` (0..1)
    of each stair is taken within a tenth of it. The jumps are real strain, not a fault of a transducer.
    """

    family: ClassVar[str] = "jerky"
    base: Curve
    step: float
    sharpness: float = 0.7
    seed: int = 0

    STAIRS: ClassVar[int] = 4000

    @property
    def end_h(self) -> float:
        """Return the end of the smooth curve [h]."""
        return self.base.end_h

    @property
    def incubation_h(self) -> float:
        """Return the incubation of the smooth curve [h]."""
        return self.base.incubation_h

    @property
    def envelope(self) -> Curve:
        """Return the smooth curve."""
        return self.base.envelope

    def _place(self, e: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        edges = _stair_edges(self.step, self.seed, self.STAIRS)
        i = np.clip(np.searchsorted(edges, e, side="right") - 1, 0, edges.size - 2)
        width = edges[i + 1] - edges[i]
        inside = np.clip((e - edges[i]) / width, 0.0, 1.0)
        return edges[i], width, inside

    def _strain(self, t: FloatArray) -> FloatArray:
        e = self.base._strain(t)
        left, width, u = self._place(e)
        s = np.clip((u - 0.45) / 0.1, 0.0, 1.0)
        stairs = left + width * ((1.0 - self.sharpness) * u + self.sharpness * s * s * (3.0 - 2.0 * s))
        return np.asarray(np.where(e > left + width, e, stairs), dtype=np.float64)

    def _rate(self, t: FloatArray) -> FloatArray:
        e = self.base._strain(t)
        left, width, u = self._place(e)
        s = np.clip((u - 0.45) / 0.1, 0.0, 1.0)
        steepness = (1.0 - self.sharpness) + self.sharpness * 6.0 * s * (1.0 - s) / 0.1
        return self.base._rate(t) * np.where(e > left + width, 1.0, steepness)


@dataclass(frozen=True)
class ConstantLoad(Curve):
    """The rate grows as the section shrinks: d(strain)/dt = f(t) (1 + strain)^n.

    ``base`` is the curve at constant stress, f its rate and F its strain; n is Norton's exponent, the
    volume constant. Separable, so exact: (1 + strain)^(1-n) = 1 - (n - 1) F(t).
    """

    family: ClassVar[str] = "constant_load"
    base: Curve
    n: float

    @cached_property
    def end_h(self) -> float:
        """Return the earlier of the base curve's end and the time at which strain runs away [h]."""
        if self.n <= 1.0:
            return self.base.end_h
        return min(self.base.end_h, time_of_strain_h(self.base, 0.999 / (self.n - 1.0)))

    @property
    def incubation_h(self) -> float:
        """Return the incubation of the curve at constant stress [h]."""
        return self.base.incubation_h

    @property
    def envelope(self) -> Curve:
        """Return the same loading on the base curve's envelope."""
        return ConstantLoad(self.base.envelope, self.n)

    def _strain(self, t: FloatArray) -> FloatArray:
        f = self.base._strain(t)
        if abs(self.n - 1.0) < 1e-12:
            return np.expm1(f)
        return np.expm1(-np.log1p(-(self.n - 1.0) * f) / (self.n - 1.0))

    def _rate(self, t: FloatArray) -> FloatArray:
        return self.base._rate(t) * (1.0 + self._strain(t)) ** self.n


FAMILIES: Final[Mapping[str, type[Curve]]] = {
    cls.family: cls
    for cls in (
        Steady, ExponentialPrimary, PowerOfTime, Logarithmic, ExponentialTertiary, Theta, Kachanov, Omega,
        Incubation, Avrami, Sum, Jerky, ConstantLoad,
    )
}  # fmt: skip


def curve_to_json(curve: Curve) -> dict[str, Any]:
    """Return plain JSON values: ``{"family": ..., parameters...}``, nested where curves are."""
    out: dict[str, Any] = {"family": curve.family}
    for f in dataclasses.fields(curve):
        v = getattr(curve, f.name)
        if isinstance(v, Curve):
            out[f.name] = curve_to_json(v)
        elif isinstance(v, tuple):
            out[f.name] = [curve_to_json(part) for part in v]
        else:
            out[f.name] = v
    return out


def curve_from_json(raw: Mapping[str, Any], place: str = "creep") -> Curve:
    """Build a curve from :func:`curve_to_json`'s values.

    Raises:
        ValueError: naming the place, what was got and what was wanted.
    """
    family = raw.get("family")
    cls = FAMILIES.get(family) if isinstance(family, str) else None
    if cls is None:
        raise ValueError(f"{place}.family: got {family!r}, wanted one of {sorted(FAMILIES)}")
    wanted = {f.name: f for f in dataclasses.fields(cls)}
    values: dict[str, Any] = {}
    for key, v in raw.items():
        if key == "family":
            continue
        if key not in wanted:
            raise ValueError(f"{place}.{key}: unknown; {family} takes {sorted(wanted)}")
        if key == "base":
            values[key] = curve_from_json(v, f"{place}.base")
        elif key == "parts":
            values[key] = tuple(curve_from_json(p, f"{place}.parts[{i}]") for i, p in enumerate(v))
        elif isinstance(v, bool | int | float):
            values[key] = v
        else:
            raise ValueError(f"{place}.{key}: got {v!r}, wanted a number")
    missing = [n for n, f in wanted.items() if n not in values and f.default is dataclasses.MISSING]
    if missing:
        raise ValueError(f"{place}.{missing[0]}: missing; {family} takes {sorted(wanted)}")
    return cls(**values)


def bisect(f: Callable[[float], float], low: float, high: float) -> float:
    """Return where ``f`` goes from <= 0 at ``low`` to > 0 at ``high``, to double precision."""
    for _ in range(80):
        middle = 0.5 * (low + high)
        if f(middle) > 0.0:
            high = middle
        else:
            low = middle
    return high


def time_of_strain_h(curve: Curve, strain: float, upto_h: float = math.inf) -> float:
    """Return the first time a rising curve reaches ``strain`` [h], infinity if not by ``upto_h``."""
    high = min(curve.end_h * NEARLY, upto_h)
    if math.isinf(high):
        high = 1.0
        while float(curve.strain(high)) < strain:
            high *= 4.0
            if high > 1e9:
                return math.inf
    if float(curve.strain(high)) < strain:
        return math.inf
    return bisect(lambda t: float(curve.strain(t)) - strain, 0.0, high)
