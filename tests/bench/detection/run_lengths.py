"""Run lengths of control charts: exact on white noise, simulated on noise with memory.

    python tests/bench/detection/run_lengths.py --seed 1 [--runs 4000]

Prints how far the in-control run length (readings to the first false alarm) drops when the noise is
first-order autocorrelated with coefficient phi, for charts designed for white noise: marginal variance one,
mean and variance known, so that nothing but the autocorrelation is wrong. Block rates of a creep test are
such noise: drift has memory, and differences over neighbouring windows share readings. The exact values
solve the integral equation of the run length (Page 1954; Crowder 1987) at Gauss-Legendre nodes.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np
from scipy.special import ndtr

sys.path.insert(0, str(Path(__file__).resolve().parent))

from charts import Array, CusumDesign, EwmaDesign, ewma_spread, run_lengths

NODES = 120
PHIS = (0.0, 0.1, 0.25, 0.5, 0.75, 0.9)
DESIGNS: tuple[CusumDesign | EwmaDesign, ...] = (
    CusumDesign(0.5, 4.0),
    CusumDesign(0.5, 5.0),
    CusumDesign(0.5, 5.0, two_sided=False),
    EwmaDesign(0.5, 3.071),  # Lucas & Saccucci 1990: run length 500 in control
    EwmaDesign(0.2, 2.962),
    EwmaDesign(0.1, 2.814),
    EwmaDesign(0.03, 2.437),
)


def exact(design: CusumDesign | EwmaDesign, shift: float = 0.0) -> float:
    """Return the average run length on independent normal readings of mean ``shift``, from the start."""
    if isinstance(design, EwmaDesign):
        return _ewma(design, shift)
    up = _one_sided(design.k, design.h, shift, (0.0, design.head_start))
    if not design.two_sided:
        return up[1]
    down = _one_sided(design.k, design.h, -shift, (0.0, design.head_start))
    # two sides with a head start: Lucas & Crosier 1982; without one it is 1/L = 1/L(up) + 1/L(down)
    return (up[1] * down[0] + up[0] * down[1] - up[0] * down[0]) / (up[0] + down[0])


def _normal(x: Array) -> Array:
    return np.asarray(np.exp(-0.5 * x * x) / (2.0 * np.pi) ** 0.5)


def _one_sided(k: float, h: float, shift: float, starts: tuple[float, ...]) -> list[float]:
    """L(u) = 1 + L(0) P(z <= k - u) + integral over (0, h) of L(y) p(y - u + k), for each start u."""
    node, weight = np.polynomial.legendre.leggauss(NODES)
    node, weight = 0.5 * h * (node + 1.0), 0.5 * h * weight
    u = np.concatenate([[0.0], node])

    def row(at: Array) -> Array:
        inside = _normal(node[None, :] - at[:, None] + k - shift) * weight[None, :]
        return np.concatenate([ndtr(k - at - shift)[:, None], inside], axis=1)

    lengths = np.linalg.solve(np.eye(NODES + 1) - row(u), np.ones(NODES + 1))
    return [float(x) for x in 1.0 + row(np.asarray(starts)) @ lengths]


def _ewma(design: EwmaDesign, shift: float) -> float:
    """L(u) = 1 + 1/w integral over (-c, c) of L(y) p((y - (1 - w) u)/w - shift), at u = 0."""
    w = design.weight
    c = design.limit * float(ewma_spread(w))
    node, weight = np.polynomial.legendre.leggauss(NODES)
    node, weight = c * node, c * weight

    def row(at: Array) -> Array:
        return _normal((node[None, :] - (1.0 - w) * at[:, None]) / w - shift) * weight[None, :] / w

    lengths = np.linalg.solve(np.eye(NODES) - row(node), np.ones(NODES))
    return float(1.0 + (row(np.zeros(1)) @ lengths)[0])


def name(design: CusumDesign | EwmaDesign) -> str:
    """Return a design in a few words."""
    if isinstance(design, EwmaDesign):
        return f"EWMA weight {design.weight:g}, limit {design.limit:g}"
    return f"CUSUM k {design.k:g}, h {design.h:g}, {'two' if design.two_sided else 'one'}-sided"


def table(seed: int, runs: int) -> str:
    """Return the table as text: per design the exact value, then mean +- standard error at each phi."""
    lines = [
        f"In-control average run length, {runs} simulated charts each (seed {seed}), +- standard error",
        f"{'design':32} {'exact, white':>12} " + " ".join(f"{f'phi {p:g}':>15}" for p in PHIS),
    ]
    for d, design in enumerate(DESIGNS):
        cells = []
        for i, phi in enumerate(PHIS):
            n = run_lengths(design, runs, [seed, d, i], phi=phi)
            cells.append(f"{f'{n.mean():.1f} +- {n.std(ddof=1) / runs**0.5:.1f}':>15}")
        lines.append(f"{name(design):32} {exact(design):12.1f} " + " ".join(cells))
    return "\n".join(lines)


def main() -> int:
    ask = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    ask.add_argument("--seed", type=int, default=1)
    ask.add_argument("--runs", type=int, default=4000)
    told = ask.parse_args()
    if told.runs < 2:
        ask.error(f"--runs: got {told.runs}, wanted 2 or more")
    print(table(told.seed, told.runs))
    return 0


if __name__ == "__main__":
    sys.exit(main())
