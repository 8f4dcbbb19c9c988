"""What the public functions accept: counts and fractions, checked with the argument's name in the message."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from watcher.bounds.mixture import Floats

LARGEST = 2**53
"""Counts beyond this are not exact as floats."""


def counts(labels: ArrayLike, errors: ArrayLike) -> tuple[Floats, Floats]:
    """Labels and errors as float arrays of whole numbers, 0 <= errors <= labels <= 2**53; ValueError otherwise."""
    n, k = _whole("labels", labels), _whole("errors", errors)
    try:
        shape = np.broadcast_shapes(n.shape, k.shape)
    except ValueError as error:
        message = f"labels of shape {n.shape} and errors of shape {k.shape} do not broadcast"
        raise ValueError(message) from error
    wrong = np.broadcast_to(k > n, shape)
    if wrong.any():
        first = np.argmax(wrong.reshape(-1))
        a, b = (float(np.broadcast_to(values, shape).reshape(-1)[first]) for values in (k, n))
        raise ValueError(f"errors = {a:.0f} among labels = {b:.0f}: errors must be at most the labels")
    return n, k


def statistics(labels: ArrayLike, errors: ArrayLike) -> NDArray[np.int64]:
    """Checked counts as the statistic of the uniform design, shape (..., 2)."""
    n, k = counts(labels, errors)
    return np.stack(np.broadcast_arrays(n, k), axis=-1).astype(np.int64)


def fractions(name: str, values: ArrayLike) -> Floats:
    """Numbers strictly between 0 and 1; ValueError naming the argument otherwise."""
    result = _numbers(name, values)
    wrong = ~((result > 0.0) & (result < 1.0))
    if wrong.any():
        raise ValueError(f"{name} = {_first(result, wrong)!r}: a number strictly between 0 and 1 is needed")
    return result


def fraction(name: str, value: float) -> float:
    """One number strictly between 0 and 1; ValueError naming the argument otherwise."""
    result = fractions(name, value)
    if result.ndim:
        raise ValueError(f"{name} has shape {result.shape}: a single number is needed")
    return float(result)


def side(value: Any) -> None:
    """ValueError unless it is "above" or "below"."""
    if value not in ("above", "below"):
        raise ValueError(f'side = {value!r}: "above" or "below" is needed')


def _numbers(name: str, values: ArrayLike) -> Floats:
    try:
        result = np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise ValueError(f"{name} = {values!r}: numbers are needed") from error
    return result


def _whole(name: str, values: ArrayLike) -> Floats:
    result = _numbers(name, values)
    with np.errstate(invalid="ignore"):
        wrong = ~((result >= 0.0) & (result <= LARGEST) & (result == np.floor(result)))
    if wrong.any():
        raise ValueError(f"{name} = {_first(result, wrong)!r}: whole numbers from 0 to 2**53 are needed")
    return result


def _first(values: Floats, wrong: NDArray[np.bool_]) -> float:
    return float(values.reshape(-1)[np.argmax(wrong.reshape(-1))])
