"""Evidence in nats, and the limits at which it reaches a threshold: the one kernel of every design.

Every number depends on its own row alone, bit for bit: no matrix product, shifts on the last axis of fixed length,
components added in fixed order. One look over a year therefore says exactly what daily looks said.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from watcher.bounds.designs import UNIFORM, Design
from watcher.bounds.mixture import LIFE, Floats, Mixture, Rows, Side

_BLOCK: Final = 32_768
"""Numbers a temporary array holds: 256 KiB stay in the cache of a core."""
_ROUNDS: Final = 200
_NEWTON_ROUNDS: Final = 60
"""After so many rounds the search halves its bracket: Newton's method may crawl where a design is not convex."""
_GAP: Final = 8.0 * np.finfo(np.float64).eps


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
    """The exponents log w_g + sum_d T_d * coefficients[d, g], shape (R, G); coefficients (D, G) shared or (R, D, G)."""
    rows = rows.astype(np.float64)
    result: Floats = rows[:, 0, None] * coefficients[..., 0, :]
    for d in range(1, rows.shape[1]):
        result += rows[:, d, None] * coefficients[..., d, :]
    result += mixture.log_weights
    return result


def _log_mean(exponents: Floats) -> tuple[Floats, Floats]:
    """The log of sum_g exp(x_g) without overflow, and exp(x_g - max); the argument is overwritten."""
    top = exponents.max(axis=1)
    exponents -= top[:, None]
    np.exp(exponents, out=exponents)
    return top + np.log(exponents.sum(axis=1)), exponents


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
    """Bracketed Newton search for the limits of a block of rows.

    `outer` always satisfies "evidence >= threshold" as computed, `inner` never does; `outer` is returned, so that
    every limit is rounded to the side that keeps the guarantee. Evidence of the plain designs is convex in the rate:
    a tangent's root lies on the outer side, and the search walks towards the limit from there.
    """

    def __init__(self, rows: Rows, thresholds: Floats, side: Side, design: Design, mixture: Mixture) -> None:
        self.rows, self.thresholds, self.side, self.design, self.mixture = rows, thresholds, side, design, mixture
        self.end = 0.0 if side == "above" else 1.0
        self.outward = -1.0 if side == "above" else 1.0

    def run(self) -> Floats:
        outer = np.full(len(self.rows), self.end)
        inner = np.full(len(self.rows), 1.0 - self.end)
        excess, _ = self._evaluate(np.arange(len(self.rows)), outer)
        active = np.flatnonzero(excess >= 0.0)
        point = self._start(active)
        for turn in range(_ROUNDS):
            if not active.size:
                break
            excess, slope = self._evaluate(active, point)
            reached = excess >= 0.0
            outer[active[reached]] = point[reached]
            inner[active[~reached]] = point[~reached]
            active, point = self._next(active, point, excess, slope, outer, inner, newton=turn < _NEWTON_ROUNDS)
        return outer

    def _evaluate(self, which: NDArray[np.intp], rate: Floats) -> tuple[Floats, Floats]:
        rows = self.rows[which]
        coefficients = self.design.coefficients(rate, self.side, self.mixture.shifts)
        value, parts = _log_mean(_exponents(rows, coefficients, self.mixture))
        total = parts.sum(axis=1)
        parts *= self.design.slope(rows, rate, self.side, self.mixture.shifts)
        return value - self.thresholds[which], parts.sum(axis=1) / total

    def _start(self, which: NDArray[np.intp]) -> Floats:
        """A score interval with room for the price of the mixture: close to the limit, on either side of it."""
        labels, errors = self.design.equivalent(self.rows[which], self.side)
        labels = np.maximum(labels, 1.0)
        p = np.clip(errors / labels, 0.0, 1.0)
        z2 = 2.0 * (self.thresholds[which] + 1.0 + 0.25 * np.log(labels)) / labels
        half = np.sqrt(z2 * (p * (1.0 - p) + z2 / 4.0))
        start: Floats = (p + z2 / 2.0 + self.outward * half) / (1.0 + z2)
        return np.clip(start, 0.0, 1.0)

    def _next(
        self,
        active: NDArray[np.intp],
        point: Floats,
        excess: Floats,
        slope: Floats,
        outer: Floats,
        inner: Floats,
        *,
        newton: bool,
    ) -> tuple[NDArray[np.intp], Floats]:
        """Drop the rows whose bracket is tight, and give the others their next point inside the bracket."""
        a, b = outer[active], inner[active]
        middle = 0.5 * (a + b)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            step = point - excess / slope
        gap = _GAP * np.maximum(np.abs(point), np.finfo(np.float64).tiny)
        # A step that no longer moves is pushed inward by a few units in the last place: either the bracket closes,
        # or the search goes on from there.
        settled = np.abs(step - point) <= gap
        reached = excess >= 0.0
        step = np.where(settled, np.where(reached, point - self.outward * gap, point + self.outward * gap), step)
        low, high = np.minimum(a, b), np.maximum(a, b)
        usable = (step > low) & (step < high) & newton
        following = np.where(usable, step, middle)
        open_ = (high - low > 2.0 * gap) & (following > low) & (following < high)
        return active[open_], following[open_]
