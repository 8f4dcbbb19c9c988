"""A sample drawn with known chances from all predictions (Horvitz, Thompson 1952), labels possibly missing.

Every usable prediction counts, selected or not: only then is the sum unbiased. It enters when its bucket is sealed.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike

from watcher.bounds.designs import jump, shaped
from watcher.bounds.mixture import Floats, Rows, Side
from watcher.bounds.weighted import bet_ceiling, bet_cost, bet_cost_slope, decimals, equivalent, rounded


@dataclass(frozen=True, slots=True)
class HorvitzThompson:
    """Selection with declared probabilities q; T = (N, k_q .., u_q ..).

    N all usable predictions, k_q the errors among the labelled of level q, u_q the selected ones of level q whose label
    is missing at sealing. They count as no error above and as an error below: a label that never comes can delay a
    breach, but it can neither cause one nor fake support.

    evidence = log sum_g w_g exp( sum_q k_q log(1 + c_g/q) - N log(1 + c_g m) ), c_g = (e^lambda - 1)/w_max above and
    -(1 - e^-|lambda|)/w_max below, w_max = 1/min q: the guarantee of section 1 of method.md for the average error of ALL
    predictions, provided that selection followed q and looked at nothing that depends on the outcome given the past.
    Raises ValueError naming `labelling_probabilities`: 1 to 16 distinct decimals in (0, 1].
    """

    levels: tuple[str, ...]
    """Decimal text of the declared probabilities, e.g. ("0.1", "1")."""
    _above: Floats = field(init=False, repr=False, compare=False)
    _below: Floats = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        values = decimals(self.levels, "labelling_probabilities")
        if max(values) > 1:
            raise ValueError(f"labelling_probabilities = {tuple(self.levels)!r}: every level must lie in (0, 1]")
        object.__setattr__(self, "levels", tuple(self.levels))
        object.__setattr__(self, "_above", np.array([rounded(1 / value, "above") for value in values]))
        object.__setattr__(self, "_below", np.array([rounded(1 / value, "below") for value in values]))

    @property
    def dimension(self) -> int:
        """Predictions, errors of each level, selected but unlabelled of each level."""
        return 1 + 2 * len(self.levels)

    def weights(self, side: Side) -> Floats:
        """1/q (L,) as rounded for a side."""
        return self._above if side == "above" else self._below

    @property
    def largest(self) -> float:
        """w_max = 1/min q, rounded up."""
        return float(self._below.max())

    def bets(self, side: Side, shifts: Floats) -> Floats:
        """c_g, shape (G,)."""
        return jump(side, shifts) / self.largest

    def coefficients(self, rate: ArrayLike, side: Side, shifts: Floats) -> Floats:
        """-log(1 + c m) for each prediction, log(1 + c/q) for each error; missing labels as told by the class."""
        result = shaped(np.shape(rate), self.dimension, shifts)
        bets, count = self.bets(side, shifts), len(self.levels)
        gains = np.log1p(np.multiply.outer(self.weights(side), bets))
        result[..., 0, :] = bet_cost(rate, bets)
        result[..., 1 : 1 + count, :] = gains
        result[..., 1 + count :, :] = 0.0 if side == "above" else gains
        return result

    def slope(self, statistics: Rows, rate: Floats, side: Side, shifts: Floats) -> Floats:
        """-N c / (1 + c m)."""
        return bet_cost_slope(statistics[..., 0], rate, self.bets(side, shifts))

    def equivalent(self, statistics: Rows, side: Side) -> tuple[Floats, Floats]:
        """The uniform sample whose mean has the same value and the same variance."""
        return equivalent(statistics[..., 0], self._errors(statistics, side), self.weights(side))

    def ceiling(self, statistics: Rows, rate: float, side: Side) -> Floats:
        """The best single bet if all errors had their mean weight."""
        errors = self._errors(statistics, side).astype(np.float64)
        predictions, weighed = statistics[..., 0].astype(np.float64), (errors * self.weights(side)).sum(axis=-1)
        return bet_ceiling(predictions, errors.sum(axis=-1), weighed, rate, side, self.largest)

    def _errors(self, statistics: Rows, side: Side) -> Rows:
        count = len(self.levels)
        errors = statistics[..., 1 : 1 + count]
        return errors if side == "above" else errors + statistics[..., 1 + count :]
