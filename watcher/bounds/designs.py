"""Sampling designs: each makes the evidence linear in an integer statistic that adds up over buckets.

The evidence of a window with statistic T is log sum_g w_g exp(sum_d T_d * coefficients[d, g]), so one kernel
(`watcher.bounds.evidence`) serves every design.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Protocol

import numpy as np
from numpy.typing import ArrayLike

from watcher.bounds.mixture import Floats, Rows, Side

PPM: Final = 1_000_000
_SLACK: Final = 1e-6
"""Far above the rounding error of a ceiling relative to its terms, far below anything that decides."""


class Design(Protocol):
    """What the kernel needs to know of a sampling design.

    Every method is elementwise: the numbers for one row must not depend on the rows beside it. Arrays whose memory
    runs over the rows innermost (`shaped`) are fastest; the layout changes no number.
    """

    @property
    def dimension(self) -> int:
        """Length D of the statistic."""
        ...

    def coefficients(self, rate: ArrayLike, side: Side, shifts: Floats) -> Floats:
        """Shape (..., D, G) for a rate of shape (...): the factor of each component at each shift, signed inside."""
        ...

    def slope(self, statistics: Rows, rate: Floats, side: Side, shifts: Floats) -> Floats:
        """Shape (..., G): the derivative by the rate of sum_d T_d * coefficients[d, g], for T of shape (..., D).

        It only speeds the search for a limit up: a limit stays correct with any slope.
        """
        ...

    def equivalent(self, statistics: Rows, side: Side) -> tuple[Floats, Floats]:
        """Labels and errors of a uniform sample that tells about as much; errors/labels is the point estimate.

        Used to start the search for a limit, and to show the estimate; it enters no probability.
        """
        ...

    def ceiling(self, statistics: Rows, rate: float, side: Side) -> Floats:
        """An upper bound of the evidence for every mixture, rounding included; +inf where none is cheap.

        Windows whose ceiling is below a threshold need not be evaluated.
        """
        ...


def jump(side: Side, shifts: Floats) -> Floats:
    """e^lambda - 1 with the sign of the side; exact for small shifts."""
    return np.expm1(shifts if side == "above" else -shifts)


def shaped(rates: tuple[int, ...], dimension: int, shifts: Floats) -> Floats:
    """An empty array of shape (*rates, D, G) whose memory runs over the rates innermost."""
    inner = np.empty((dimension, shifts.size, *rates))
    return inner.transpose(*range(2, inner.ndim), 0, 1)


def per_label(rate: ArrayLike, side: Side, shifts: Floats) -> Floats:
    """-log(1 - m + m e^lambda), shape (..., G): what every label costs a bet on shift lambda against rate m."""
    product = np.multiply.outer(jump(side, shifts), np.asarray(rate, dtype=np.float64))
    np.negative(np.log1p(product, out=product), out=product)
    return product.transpose(*range(1, product.ndim), 0)


def per_label_slope(labels: Rows, rate: Floats, side: Side, shifts: Floats) -> Floats:
    """The derivative -n c / (1 + m c) of n labels' cost by the rate, shape (..., G), with c = e^lambda - 1."""
    c = jump(side, shifts).reshape(-1, *(1,) * rate.ndim)
    below = rate * c
    below += 1.0
    np.divide(c, below, out=below)
    below *= -labels
    return np.asarray(below.transpose(*range(1, below.ndim), 0))


def entropy_ceiling(labels: Floats, errors: Floats, rate: float | Floats, side: Side) -> Floats:
    """n*KL(k/n, rate) on the right side of the rate, else 0, plus slack: no shift can give more evidence."""
    with np.errstate(divide="ignore", invalid="ignore"):
        right = labels - errors
        first = np.where(errors > 0, errors * np.log(errors / (labels * rate)), 0.0)
        second = np.where(right > 0, right * np.log(right / (labels * (1.0 - rate))), 0.0)
    beyond = errors > labels * rate if side == "above" else errors < labels * rate
    slack = _SLACK * (1.0 + np.abs(first) + np.abs(second))
    return np.asarray(np.where(beyond, first + second, 0.0) + slack)


@dataclass(frozen=True, slots=True)
class Uniform:
    """Labels drawn uniformly; T = (labels n, errors k); the formula of method.md section 1."""

    @property
    def dimension(self) -> int:
        """Labels and errors."""
        return 2

    def coefficients(self, rate: ArrayLike, side: Side, shifts: Floats) -> Floats:
        """-log(1 - m + m e^lambda) for each label and lambda for each error."""
        result = shaped(np.shape(rate), 2, shifts)
        result[..., 0, :] = per_label(rate, side, shifts)
        result[..., 1, :] = shifts if side == "above" else -shifts
        return result

    def slope(self, statistics: Rows, rate: Floats, side: Side, shifts: Floats) -> Floats:
        """-n c / (1 + m c) with c = e^lambda - 1."""
        return per_label_slope(statistics[..., 0], rate, side, shifts)

    def equivalent(self, statistics: Rows, side: Side) -> tuple[Floats, Floats]:  # noqa: ARG002  one side's protocol
        """The counts themselves."""
        return statistics[..., 0].astype(np.float64), statistics[..., 1].astype(np.float64)

    def ceiling(self, statistics: Rows, rate: float | Floats, side: Side) -> Floats:
        """n*KL(k/n, rate)."""
        return entropy_ceiling(*self.equivalent(statistics, side), rate, side)


@dataclass(frozen=True, slots=True)
class Loss:
    """A loss in [0, 1] per label; T = (labels n, loss in parts per million rounded down, the same rounded up).

    By convexity the process of section 1 then has mean at most 1; each side takes the sum that is rounded against it.
    """

    @property
    def dimension(self) -> int:
        """Labels, loss rounded down, loss rounded up."""
        return 3

    def coefficients(self, rate: ArrayLike, side: Side, shifts: Floats) -> Floats:
        """As `Uniform`, lambda/1e6 for each part per million."""
        result = shaped(np.shape(rate), 3, shifts)
        result[..., 0, :] = per_label(rate, side, shifts)
        result[..., 1, :] = shifts / PPM if side == "above" else 0.0
        result[..., 2, :] = 0.0 if side == "above" else -shifts / PPM
        return result

    def slope(self, statistics: Rows, rate: Floats, side: Side, shifts: Floats) -> Floats:
        """As `Uniform`."""
        return per_label_slope(statistics[..., 0], rate, side, shifts)

    def equivalent(self, statistics: Rows, side: Side) -> tuple[Floats, Floats]:
        """Labels and the summed loss of that side."""
        used = 1 if side == "above" else 2
        return statistics[..., 0].astype(np.float64), statistics[..., used] / PPM

    def ceiling(self, statistics: Rows, rate: float | Floats, side: Side) -> Floats:
        """n*KL(mean loss, rate)."""
        labels, errors = self.equivalent(statistics, side)
        return entropy_ceiling(labels, np.minimum(errors, labels), rate, side)


UNIFORM: Final = Uniform()
LOSS: Final = Loss()
