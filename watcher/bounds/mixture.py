"""The fixed mixtures of log-odds shifts over which the evidence is averaged."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

Side = Literal["above", "below"]
"""Evidence that the average error lies above (below) a rate; lower (upper) limits come from it."""

Floats = NDArray[np.float64]
Rows = NDArray[Any]
"""Statistics of windows, integers of shape (..., D)."""


@dataclass(frozen=True, slots=True, eq=False)
class Mixture:
    """Sizes of log-odds shifts |lambda| > 0 with weights that sum to 1; the side gives the sign.

    It is fixed beforehand and the same for every rate, hence one martingale covers all rates and all times (method.md
    section 1).
    """

    shifts: Floats
    """Shape (G,)."""
    weights: Floats
    """Shape (G,)."""
    log_weights: Floats = field(init=False)

    def __post_init__(self) -> None:
        for values in (self.shifts, self.weights):
            values.setflags(write=False)
        object.__setattr__(self, "log_weights", np.log(self.weights))


def _life() -> Mixture:
    shifts = np.geomspace(0.001, 3.0, 64)
    weights = np.sqrt(shifts)
    return Mixture(shifts, weights / weights.sum())


def _restart(life: Mixture) -> Mixture:
    # A restart hunts for rises that matter within weeks, so most of its weight sits on shifts of 1.3x to 5x.
    near = np.linspace(0.25, 1.6, 28)
    shifts = np.concatenate([life.shifts, near])
    weights = np.concatenate([0.2 * life.weights, np.full(near.size, 0.8 / near.size)])
    return Mixture(shifts, weights)


LIFE: Final = _life()
"""Window 0 and every single window: 64 shifts from 0.001 to 3, weights proportional to their square root."""
RESTART: Final = _restart(LIFE)
"""Windows that start at a later bucket: 0.2 of `LIFE` and 0.8 spread evenly over 28 shifts in [0.25, 1.6]."""
