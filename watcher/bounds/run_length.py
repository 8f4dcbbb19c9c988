"""Early warning: a false one comes once in A buckets on average, not "with chance".

The window table of the breach with every share 1 and the restart mixture, over the windows since the last reset: a
Shiryaev-Roberts statistic averaged over the mixture (Pollak 1985; Shin, Ramdas, Rinaldo 2022).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from watcher.bounds.designs import UNIFORM, Design
from watcher.bounds.mixture import RESTART, Floats

CALM: Final = 28 * 86400
"""Seconds for which the fresh sum must stay below sqrt(A) before a warning is over."""
GRAIN: Final = 1e6
"""Sums are judged rounded down to 1e-6 nats."""
Kind = Literal["warning", "warning-over"]


@dataclass(frozen=True, slots=True)
class Warning:  # noqa: A001  the product's own word; nobody imports it bare
    """Where the warning of one cell stands; integers and booleans only, so that it can be kept in a chain of digests."""

    reset: int = 0
    """Index of the first bucket whose windows count: those before were dropped when a warning was raised."""
    standing: bool = False
    calm_since: int = -1
    """While standing: end (epoch seconds) of the newest bucket after which the fresh sum was not below sqrt(A); else -1."""


def warning_sums(buckets: ArrayLike, rate: float, *, design: Design = UNIFORM) -> Floats:
    """Log of sum_{j <= t} exp(evidence_j(t)) after each bucket t of a run, windows started within the run; nats.

    `buckets` (..., B, D) integers; `rate` in (0, 1). The windows' common mixture lets prefix sums do it, one step a bucket.
    The sum minus t is a supermartingale while the average error is at most `rate`, so it first reaches A after at least A
    buckets on average. The number for a bucket depends on the buckets up to it alone. Rounded down to 1e-6.
    """
    rows = np.asarray(buckets)
    if rows.ndim < 2 or rows.shape[-1] != design.dimension:
        raise ValueError(f"buckets has shape {rows.shape}: (..., number, {design.dimension}) is needed")
    coefficients = design.coefficients(np.asarray(rate, dtype=np.float64), "above", RESTART.shifts)
    lived = np.cumsum(rows, axis=-2)
    grown = lived[..., 0, None] * coefficients[0]
    for d in range(1, design.dimension):
        if rows[..., d].any():
            grown += lived[..., d, None] * coefficients[d]
    before = np.concatenate([np.zeros_like(grown[..., :1, :]), grown[..., :-1, :]], axis=-2)
    exponents = grown + np.logaddexp.accumulate(-before, axis=-2) + RESTART.log_weights
    top = exponents.max(axis=-1)
    sums = top + np.log(np.cumsum(np.exp(exponents - top[..., None]), axis=-1)[..., -1])
    return np.asarray(np.floor(sums * GRAIN) / GRAIN)


def walk_warnings(
    state: Warning,
    buckets: ArrayLike,
    since: int,
    ends: ArrayLike,
    rate: float,
    log_A: float,
    *,
    design: Design = UNIFORM,
) -> tuple[Warning, tuple[tuple[int, Kind], ...]]:
    """Take the buckets since..B-1 into account, in order: the new state, and what happened at which bucket.

    `buckets` (B, D) all counted buckets since the release, `ends` (B,) their ends in epoch seconds, `rate` the rate tested
    (the tolerance), `log_A` the log of the mean number of buckets to a false warning. Raised when the sum reaches A: all
    windows are dropped. Over when the fresh sum stayed below sqrt(A) for 28 days; a further crossing while it stands drops
    the windows again and makes no event. Walking in one go or bucket by bucket gives the same states.
    """
    rows, moments = np.asarray(buckets), np.asarray(ends)
    if not 0 <= state.reset <= since <= len(rows) or len(moments) < len(rows):
        raise ValueError(
            f"since = {since}: a bucket from {state.reset} (the last reset) to {len(rows)} is allowed, with an end for each"
        )
    if not log_A > 0.0:
        raise ValueError(f"log_A = {log_A!r}: a positive number is allowed, the log of a mean run length above 1")
    happened: list[tuple[int, Kind]] = []
    t = since
    while t < len(rows):
        sums = warning_sums(rows[state.reset :], rate, design=design)
        start = state.reset
        while t < len(rows) and state.reset == start:
            state, kind = _step(state, float(sums[t - start]), t, int(moments[t]), log_A)
            if kind is not None:
                happened.append((t, kind))
            t += 1
    return state, tuple(happened)


def advance_warning(
    state: Warning,
    buckets: ArrayLike,
    t: int,
    ends: ArrayLike,
    rate: float,
    log_A: float,
    *,
    design: Design = UNIFORM,
) -> tuple[Warning, Kind | None]:
    """`walk_warnings` for the single bucket t; only buckets up to t are looked at."""
    rows: NDArray[np.int64] = np.asarray(buckets)[: t + 1]
    state, happened = walk_warnings(state, rows, t, ends, rate, log_A, design=design)
    return state, happened[0][1] if happened else None


def _step(state: Warning, total: float, t: int, end: int, log_A: float) -> tuple[Warning, Kind | None]:
    if total >= log_A:
        return Warning(t + 1, standing=True, calm_since=end), None if state.standing else "warning"
    if not state.standing:
        return state, None
    if total >= 0.5 * log_A:
        return Warning(state.reset, standing=True, calm_since=end), None
    if end - state.calm_since >= CALM:
        return Warning(state.reset), "warning-over"
    return state, None
