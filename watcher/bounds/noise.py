"""Known label noise: either direction of the flip of the error indicator has a chance in [a, b], a + b < 1.

A true rate p then shows as something between p*(1-a-b) + a and p*(1-a-b) + b (method.md section 5).
"""

from __future__ import annotations

from fractions import Fraction
from typing import overload

import numpy as np
from numpy.typing import ArrayLike

from watcher.bounds.mixture import Floats
from watcher.bounds.weighted import rounded

Noise = tuple[float, float]


def _parts(label_noise: Noise) -> tuple[Fraction, Fraction, Fraction]:
    a, b = (float(value) for value in label_noise)
    if not (0.0 <= a <= b and a + b < 1.0):
        raise ValueError(f"label_noise = ({a!r}, {b!r}): two chances with 0 <= a <= b and a + b < 1 are allowed")
    return Fraction(a), Fraction(b), 1 - Fraction(a) - Fraction(b)


def _tolerance(tolerance: float) -> Fraction:
    if not 0.0 < tolerance < 1.0:
        raise ValueError(f"tolerance = {tolerance!r}: a number strictly between 0 and 1 is allowed")
    return Fraction(tolerance)


def breach_rate(tolerance: float, label_noise: Noise | None) -> float:
    """The largest rate at which errors can be SEEN while the true rate is at most `tolerance`, rounded up.

    A breach is tested against it: whatever the noise within its declared bounds, it raises no false breach.
    """
    if label_noise is None:
        return tolerance
    _, b, scale = _parts(label_noise)
    # "below" rounds a rate up: evidence above it only gets weaker.
    return rounded(_tolerance(tolerance) * scale + b, "below")


def support_rate(tolerance: float, label_noise: Noise | None) -> float:
    """The smallest rate at which errors can be SEEN when the true rate is `tolerance` or more, rounded down.

    Support is tested against it.
    """
    if label_noise is None:
        return tolerance
    a, _, scale = _parts(label_noise)
    return rounded(_tolerance(tolerance) * scale + a, "above")


@overload
def true_limits(lower: float, upper: float, label_noise: Noise | None) -> tuple[float, float]: ...
@overload
def true_limits(lower: Floats, upper: Floats, label_noise: Noise | None) -> tuple[Floats, Floats]: ...
def true_limits(
    lower: ArrayLike, upper: ArrayLike, label_noise: Noise | None
) -> tuple[float, float] | tuple[Floats, Floats]:
    """Limits of the true rate from limits of the seen one, rounded outward and cut to [0, 1].

    (lower - b)/(1-a-b) and (upper - a)/(1-a-b): they keep the confidence of the limits they are made of.
    """
    scalar = np.ndim(lower) == 0 and np.ndim(upper) == 0
    low, high = np.asarray(lower, dtype=np.float64), np.asarray(upper, dtype=np.float64)
    if label_noise is not None:
        a, b = (float(value) for value in label_noise)
        scale = float(_parts(label_noise)[2])
        # Three correctly rounded steps are off by less than two units in the last place; four steps outward cover them.
        room = 4.0 * np.finfo(np.float64).eps
        low, high = (low - b) / scale, (high - a) / scale
        low, high = np.clip(low - room * np.abs(low), 0.0, 1.0), np.clip(high + room * np.abs(high), 0.0, 1.0)
    return (float(low), float(high)) if scalar else (low, high)
