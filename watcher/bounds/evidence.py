"""Evidence in nats, and the limits at which it reaches a threshold: the one kernel of every design.

Every number depends on its own row alone, bit for bit: no matrix product, the sums over components and shifts run in a
fixed order. One look over a year therefore says exactly what daily looks said.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import xlogy

from watcher.bounds.designs import UNIFORM, Design
from watcher.bounds.mixture import LIFE, Floats, Mixture, Rows, Side

_BLOCK: Final = 65_536
"""Numbers a temporary array holds: 512 KiB stay in the cache of a core."""
_ROUNDS: Final = 200
_CURVED_ROUNDS: Final = 60
"""After so many rounds the search halves its bracket: steps by the slope may crawl where a design is not convex."""
_TIGHT: Final = 1e-7
"""A limit is accepted when its evidence is at most so many nats over the threshold."""
_GAP: Final = 8.0 * np.finfo(np.float64).eps
"""... or when the bracket is so narrow, relative to the rate."""


def evidence(
    statistics: ArrayLike, rate: ArrayLike, side: Side, *, design: Design = UNIFORM, mixture: Mixture = LIFE
) -> Floats:
    """Evidence (nats) that the average error lies above (below) a rate.

    `statistics` (..., D) integers, `rate` (...) in [0, 1]; they broadcast. For any fixed mixture the chance that
    evidence at the running mean of the p_i ever reaches log(1/risk) is at most the risk (Ville 1939; method.md
    section 1). A window without labels gives exactly 0.
    """
    statistics, rate = _rows(statistics, design), np.asarray(rate, dtype=np.float64)
    shape = np.broadcast_shapes(statistics.shape[:-1], rate.shape)
    rows = np.broadcast_to(statistics, (*shape, design.dimension)).reshape(-1, design.dimension)
    result = np.empty(len(rows))
    shared = rate.size == 1
    coefficients = design.coefficients(rate.reshape(()), side, mixture.shifts) if shared else np.empty(0)
    rates = rate if shared else np.broadcast_to(rate, shape).reshape(-1)
    size = mixture.shifts.size * (1 if shared else design.dimension)
    for block in _blocks(len(rows), size):
        if not shared:
            coefficients = design.coefficients(rates[block], side, mixture.shifts)
        result[block] = _log_mean(_exponents(rows[block], coefficients, mixture))[0]
    result[~rows.any(axis=1)] = 0.0
    return result.reshape(shape)


def lower_limit(
    statistics: ArrayLike, threshold: ArrayLike, *, design: Design = UNIFORM, mixture: Mixture = LIFE
) -> Floats:
    """The rate at which evidence "above" equals a threshold (nats, > 0), rounded down; 0 where it never does.

    `statistics` (..., D) and `threshold` (...) broadcast. With threshold log(1/a) it is a lower confidence limit of
    level 1 - a for the average error, at all times at once.
    """
    return _limits(statistics, threshold, "above", design, mixture)


def upper_limit(
    statistics: ArrayLike, threshold: ArrayLike, *, design: Design = UNIFORM, mixture: Mixture = LIFE
) -> Floats:
    """The rate at which evidence "below" equals a threshold (nats, > 0), rounded up; 1 where it never does.

    As `lower_limit`, on the other side.
    """
    return _limits(statistics, threshold, "below", design, mixture)


def _rows(statistics: ArrayLike, design: Design) -> Rows:
    rows = np.asarray(statistics)
    if rows.ndim == 0 or rows.shape[-1] != design.dimension:
        raise ValueError(f"statistics has shape {rows.shape}: its last axis must hold {design.dimension} components")
    return rows


def _blocks(count: int, row_size: int) -> list[slice]:
    step = max(1, _BLOCK // row_size)
    return [slice(start, min(start + step, count)) for start in range(0, count, step)]


def _exponents(rows: Rows, coefficients: Floats, mixture: Mixture) -> Floats:
    """The exponents log w_g + sum_d T_d * coefficients[d, g], shape (G, R), for coefficients (D, G) or (R, D, G)."""
    values = np.array(rows.T, dtype=np.float64, order="C")
    by_component = coefficients[..., None] if coefficients.ndim == 2 else coefficients.transpose(1, 2, 0)
    result, product = np.empty((2, mixture.shifts.size, len(rows)))
    np.multiply(values[0], by_component[0], out=result)
    for d in range(1, len(values)):
        result += np.multiply(values[d], by_component[d], out=product)
    result += mixture.log_weights[:, None]
    return np.asarray(result)


def _log_mean(exponents: Floats) -> tuple[Floats, Floats]:
    """The log of sum_g exp(x_g) without overflow, and exp(x_g - max); the argument is overwritten."""
    top = exponents.max(axis=0)
    exponents -= top
    np.exp(exponents, out=exponents)
    return top + np.log(_add_up(exponents)), exponents


def _add_up(parts: Floats) -> Floats:
    """Sum over the shifts, first to last whatever the number of rows.

    A single column would be summed in another order (numpy pairs the terms of a contiguous sum), hence the second one.
    """
    if parts.shape[1] == 1:
        return np.asarray(np.repeat(parts, 2, axis=1).sum(axis=0)[:1])
    return np.asarray(parts.sum(axis=0))


def _limits(statistics: ArrayLike, threshold: ArrayLike, side: Side, design: Design, mixture: Mixture) -> Floats:
    statistics, threshold = _rows(statistics, design), np.asarray(threshold, dtype=np.float64)
    shape = np.broadcast_shapes(statistics.shape[:-1], threshold.shape)
    rows = np.broadcast_to(statistics, (*shape, design.dimension)).reshape(-1, design.dimension)
    thresholds = np.broadcast_to(threshold, shape).reshape(-1)
    result = np.empty(len(rows))
    for block in _blocks(len(rows), mixture.shifts.size * design.dimension):
        result[block] = _Search(rows[block], thresholds[block], side, design, mixture).run()
    return result.reshape(shape)


class _Search:
    """Bracketed Halley search for the limits of a block of rows.

    `outer` always satisfies "evidence >= threshold" as computed, `inner` never does; `outer` is returned, so that
    every limit is rounded to the side that keeps the guarantee, whatever the steps in between are worth.
    """

    def __init__(self, rows: Rows, thresholds: Floats, side: Side, design: Design, mixture: Mixture) -> None:
        self.rows, self.thresholds, self.side, self.design, self.mixture = rows, thresholds, side, design, mixture
        self.end = 0.0 if side == "above" else 1.0
        self.outward = -1.0 if side == "above" else 1.0

    def run(self) -> Floats:
        outer = np.full(len(self.rows), self.end)
        inner = np.full(len(self.rows), 1.0 - self.end)
        active = np.flatnonzero(self._has_limit())
        point = self._start(active)
        for turn in range(_ROUNDS):
            if not active.size:
                break
            excess, slope, bend = self._evaluate(active, point)
            reached = excess >= 0.0
            outer[active[reached]] = point[reached]
            inner[active[~reached]] = point[~reached]
            step = self._step(point, excess, slope, bend)
            low, high = np.minimum(outer[active], inner[active]), np.maximum(outer[active], inner[active])
            usable = (step > low) & (step < high) & (turn < _CURVED_ROUNDS)
            step = np.where(usable, step, 0.5 * (low + high))
            going = (excess < 0.0) | (excess > _TIGHT)
            going &= (high - low > _GAP * high) & (step > low) & (step < high)
            active, point = active[going], step[going]
        return outer

    def _has_limit(self) -> NDArray[np.bool_]:
        """Whether the evidence reaches the threshold at the outermost rate.

        A single shift's part of the mixture, here the largest shift's, is a lower bound: it settles most rows.
        """
        largest = int(np.argmax(self.mixture.shifts))
        coefficients = self.design.coefficients(np.asarray(self.end), self.side, self.mixture.shifts)[:, largest]
        part = (self.rows * coefficients).sum(axis=1) + self.mixture.log_weights[largest]
        result = part >= self.thresholds + 1e-6 * (1.0 + self.thresholds)
        rest = np.flatnonzero(~result)
        most = evidence(self.rows[rest], self.end, self.side, design=self.design, mixture=self.mixture)
        result[rest] = most >= self.thresholds[rest]
        return np.asarray(result)

    def _evaluate(self, which: NDArray[np.intp], rate: Floats) -> tuple[Floats, Floats, Floats]:
        """Evidence beyond the threshold (nats), its derivative by the rate, and nearly its second derivative.

        The second is the variance of the slope over the mixture; the slopes' own change is left out, which is small.
        """
        rows = self.rows[which]
        coefficients = self.design.coefficients(rate, self.side, self.mixture.shifts)
        value, parts = _log_mean(_exponents(rows, coefficients, self.mixture))
        total = _add_up(parts)
        slopes = self.design.slope(rows, rate, self.side, self.mixture.shifts).T
        parts *= slopes
        slope = _add_up(parts) / total
        parts *= slopes
        return value - self.thresholds[which], slope, _add_up(parts) / total - slope * slope

    def _step(self, point: Floats, excess: Floats, slope: Floats, bend: Floats) -> Floats:
        """Halley's step, aimed a trifle outside the limit; never shorter than what moves a float."""
        goal = excess - 0.3 * _TIGHT
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            newton = goal / slope
            curved = 1.0 - 0.5 * newton * bend / slope
            step = point - np.where(curved > 0.5, newton / curved, newton)
        least = 0.5 * _GAP * point
        direction = np.where(excess >= 0.0, -self.outward, self.outward)
        return np.where(np.abs(step - point) <= least, point + direction * least, step)

    def _start(self, which: NDArray[np.intp]) -> Floats:
        """Where n*KL(k/n, m) equals the threshold plus the usual price of the mixture: close to the limit.

        The price is an observation on LIFE, right to some hundredths of a nat; a poor start costs rounds, nothing else.
        """
        labels, errors = self.design.equivalent(self.rows[which], self.side)
        labels = np.maximum(labels, 1.0)
        p = np.clip(errors, 0.0, labels) / labels
        threshold = self.thresholds[which]
        price = 0.685 + 0.2 * np.log(np.maximum(threshold, 0.1)) + 0.25 * np.log1p(labels * p * (1.0 - p))
        goal = (threshold + price) / labels
        half = np.sqrt(2.0 * goal * (p * (1.0 - p) + 0.5 * goal))
        m = _inside((p + goal + self.outward * half) / (1.0 + 2.0 * goal))
        for _ in range(2):
            entropy = xlogy(p, p / m) + xlogy(1.0 - p, (1.0 - p) / (1.0 - m))
            gradient = (m - p) / (m * (1.0 - m))
            with np.errstate(divide="ignore", invalid="ignore"):
                following = m - (entropy - goal) / gradient
            m = np.where((following > 0.0) & (following < 1.0), following, m)
        return _inside(m)


def _inside(rate: Floats) -> Floats:
    return np.asarray(np.clip(rate, 1e-300, 1.0 - np.finfo(np.float64).epsneg))
