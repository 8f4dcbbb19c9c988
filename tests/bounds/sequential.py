"""Exact dynamic programmes for sequential rules, the yardsticks of these tests; no code shared with the product."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from scipy.stats import binom, norm


def kl(p: float, q: float) -> float:
    """Bernoulli relative entropy, nats."""
    return p * math.log(p / q) + (1 - p) * math.log((1 - p) / (1 - q))


def first_exit(low: np.ndarray, high: np.ndarray, rate: float, step: int = 1) -> tuple[np.ndarray, np.ndarray]:
    """Chances of leaving below and above at each look: count <= low[i] or count >= high[i] after (i + 1)*step labels."""
    pmf = binom.pmf(np.arange(step + 1), step, rate)
    alive, below, above = np.ones(1), [], []
    for a, b in zip(low.tolist(), high.tolist(), strict=True):
        alive = np.convolve(alive, pmf)
        count = np.arange(alive.size)
        below.append(alive[count <= a].sum())
        above.append(alive[count >= b].sum())
        alive = np.where((count > a) & (count < b), alive, 0.0)
        last = np.flatnonzero(alive)
        alive = alive[: last[-1] + 1] if last.size else alive[:1]
    return np.array(below), np.array(above)


def sprt_lines(p0: float, p1: float, alpha: float, beta: float) -> tuple[float, float, float, float]:
    """Wald's k, h1, h2, s."""
    k = math.log(p1 * (1 - p0) / (p0 * (1 - p1)))
    return k, math.log((1 - alpha) / beta) / k, math.log((1 - beta) / alpha) / k, math.log((1 - p0) / (1 - p1)) / k


def sprt(p0: float, p1: float, alpha: float, beta: float, rate: float, labels: int) -> tuple[float, float, float]:
    """Exact P(reject), P(accept), mean sample number of Wald's test at a true rate (labels: far beyond any decision)."""
    _, h1, h2, s = sprt_lines(p0, p1, alpha, beta)
    n = np.arange(1, labels + 1)
    below, above = first_exit(np.floor(s * n - h1 + 1e-12), np.ceil(s * n + h2 - 1e-12), rate)
    return float(above.sum()), float(below.sum()), float((n * (below + above)).sum())


def bernoulli_cusum_anss(rate: float, m: int, steps: int) -> float:
    """Exact mean number of labels to S >= steps/m for S = max(0, S) + X - 1/m, zero start (states in units of 1/m)."""
    # S before the next label, as max(0, S): 0 .. steps - 1.
    matrix = np.eye(steps)
    for state in range(steps):
        up = state + m - 1
        if up < steps:
            matrix[state, up] -= rate
        matrix[state, max(0, state - 1)] -= 1 - rate
    return float(np.linalg.solve(matrix, np.ones(steps))[0])


def repeated_z(looks: int, bar: Callable[[int], float], points: int = 401) -> float:
    """P(|Z_k| >= bar(k) at some look k <= looks) for sums of standard normal blocks (Armitage, McPherson, Rowe 1969)."""
    edge, chance, density, grid = bar(1), 2 * norm.sf(bar(1)), None, None
    for k in range(1, looks + 1):
        edge = bar(k) * math.sqrt(k)
        new = np.linspace(-edge, edge, points)
        if density is None:
            density = norm.pdf(new)
        else:
            weights = np.full(grid.size, grid[1] - grid[0])
            weights[1:-1:2] *= 4 / 3
            weights[2:-1:2] *= 2 / 3
            weights[[0, -1]] /= 3
            mass = density * weights
            chance += float((mass * (norm.sf(edge - grid) + norm.cdf(-edge - grid))).sum())
            density = norm.pdf(new[:, None] - grid[None, :]) @ mass
        grid = new
    return float(chance)
