"""Labels that come in clusters (one customer, one session) whose outcomes go together."""

from __future__ import annotations

import operator
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import ArrayLike

from watcher.bounds.designs import jump, shaped
from watcher.bounds.mixture import Floats, Rows, Side

MOST_LABELS: Final = 200
"""Largest n_max: the statistic has n_max*(n_max + 3)/2 components."""
_SLACK: Final = 1e-6


@dataclass(frozen=True, slots=True)
class Clustered:
    """Whole clusters of at most n_max labels; T = the number of clusters with n labels and k errors, one per `pairs`.

    evidence = log sum_g w_g exp( sum_c log(1 + f_g (k_c - m n_c)) ), f_g = c_g/((1 + c_g m) n_max), c_g = e^lambda - 1.
    Every factor has mean at most 1 when a cluster's expected errors given the past are at most m times its labels, so
    the verdict at the tolerance is exact for the per-LABEL rate whatever goes on inside a cluster; n_max = 1 is section 1
    of method.md. Limits found by inversion hold for a constant rate only. Raises ValueError naming `n_max`.
    """

    n_max: int
    """Largest number of labels in a cluster, 1 to 200; larger clusters are refused before they come here."""
    pairs: tuple[tuple[int, int], ...] = field(init=False, repr=False, compare=False)
    """(n, k) with 1 <= n <= n_max, 0 <= k <= n: by n, then by k."""
    _labels: Floats = field(init=False, repr=False, compare=False)
    _errors: Floats = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        try:
            n_max = operator.index(self.n_max)
        except TypeError:
            n_max = 0
        if not 1 <= n_max <= MOST_LABELS:
            raise ValueError(
                f"n_max = {self.n_max!r}: an integer from 1 to {MOST_LABELS} is allowed; cut longer clusters"
            )
        pairs = tuple((n, k) for n in range(1, n_max + 1) for k in range(n + 1))
        object.__setattr__(self, "pairs", pairs)
        object.__setattr__(self, "_labels", np.array([n for n, _ in pairs], dtype=np.float64))
        object.__setattr__(self, "_errors", np.array([k for _, k in pairs], dtype=np.float64))

    @property
    def dimension(self) -> int:
        """One component a pair."""
        return len(self.pairs)

    def coefficients(self, rate: ArrayLike, side: Side, shifts: Floats) -> Floats:
        """log(1 + f (k - m n)) for each pair."""
        result = shaped(np.shape(rate), self.dimension, shifts)
        m = np.asarray(rate, dtype=np.float64)
        for g, c in enumerate(jump(side, shifts).tolist()):
            bet = c / ((1.0 + c * m) * self.n_max)
            result[..., g] = np.log1p(bet[..., None] * (self._errors - m[..., None] * self._labels))
        return result

    def slope(self, statistics: Rows, rate: Floats, side: Side, shifts: Floats) -> Floats:
        """-sum T c (n + c k) / ((1 + c m) (n_max (1 + c m) + c (k - m n)))."""
        result = np.empty((*np.shape(rate), shifts.size))
        m = np.asarray(rate, dtype=np.float64)[..., None]
        for g, c in enumerate(jump(side, shifts).tolist()):
            scale = 1.0 + c * m
            below = scale * (self.n_max * scale + c * (self._errors - m * self._labels))
            result[..., g] = -(statistics * (c * (self._labels + c * self._errors) / below)).sum(axis=-1)
        return result

    def equivalent(self, statistics: Rows, side: Side) -> tuple[Floats, Floats]:  # noqa: ARG002  one side's protocol
        """Labels and errors over n_max: as if every cluster were a single label of n_max labels' worth."""
        labels, errors, _ = self._sums(statistics)
        return labels / self.n_max, errors / self.n_max

    def ceiling(self, statistics: Rows, rate: float, side: Side) -> Floats:
        """C log(1 + (K - m N)/(C m n_max)): all clusters alike (Jensen), the boldest bet."""
        labels, errors, clusters = self._sums(statistics)
        room = (rate if side == "above" else 1.0 - rate) * self.n_max
        excess = errors - rate * labels if side == "above" else rate * labels - errors
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            found = clusters * np.log1p(np.maximum(excess, 0.0) / (clusters * room))
        found = np.where(clusters > 0, found, 0.0)
        return np.asarray(np.where(np.isnan(found), np.inf, found + _SLACK * (1.0 + found)))

    def _sums(self, statistics: Rows) -> tuple[Floats, Floats, Floats]:
        counts = np.asarray(statistics, dtype=np.float64)
        return (counts * self._labels).sum(axis=-1), (counts * self._errors).sum(axis=-1), counts.sum(axis=-1)
