"""`import watcher` in a notebook: what goes in, what comes out, what is refused."""

from __future__ import annotations

import math
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest

import watcher


def test_the_face_is_sorted_and_complete():
    """Everything named is there, in order; a name that is not offered says what is."""
    assert watcher.__all__ == sorted(watcher.__all__)
    assert set(watcher.__all__) <= set(dir(watcher))
    assert all(callable(getattr(watcher, name)) for name in watcher.__all__)
    with pytest.raises(AttributeError, match="it offers"):
        _ = watcher.nothing


def test_importing_it_is_cheap():
    """`import watcher` alone loads no numpy: the command line starts without it."""
    code = "import sys, watcher; sys.exit('numpy' in sys.modules or 'scipy' in sys.modules)"

    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_scalars_arrays_and_columns():
    """Numbers give numbers, arrays and pandas columns give arrays of the broadcast shape."""
    table = pd.DataFrame({"labels": [100, 200, 0], "errors": [3, 9, 0]})
    found = watcher.evidence(table.labels, table.errors, 0.03)
    bounds = watcher.confidence_bounds(table.labels, table.errors, 0.01)

    assert isinstance(found, np.ndarray)
    assert [float(watcher.evidence(n, k, 0.03)) for n, k in ((100, 3), (200, 9), (0, 0))] == found.tolist()
    assert float(watcher.confidence_bounds(200, 9, 0.01).upper) == bounds.upper[1]
    assert np.ndim(watcher.evidence(100, 3, 0.03)) == 0
    assert watcher.evidence(np.ones((3, 1)), 0, [0.01, 0.02]).shape == (3, 2)
    assert watcher.exact_bounds(table.labels, table.errors, [[0.1], [0.01]]).lower.shape == (2, 3)


def test_limits_are_where_the_evidence_reaches_half_the_risk():
    """confidence_bounds spends risk/2 a side."""
    bounds = watcher.confidence_bounds(5000, 150, 0.01)

    for limit, side in ((bounds.lower, "above"), (bounds.upper, "below")):
        assert watcher.evidence(5000, 150, float(limit), side) == pytest.approx(math.log(200), abs=1.1e-7)


@pytest.mark.parametrize(
    ("call", "named"),
    [
        (lambda: watcher.evidence(10, 11, 0.03), "errors = 11 among labels = 10"),
        (lambda: watcher.evidence([10, 5], [1, 6], 0.03), "errors = 6 among labels = 5"),
        (lambda: watcher.evidence(-1, 0, 0.03), "labels = -1"),
        (lambda: watcher.evidence(10, -1, 0.03), "errors = -1"),
        (lambda: watcher.evidence(math.nan, 0, 0.03), "labels = nan"),
        (lambda: watcher.evidence(10, 0.5, 0.03), "errors = 0.5"),
        (lambda: watcher.evidence("ten", 0, 0.03), "labels = 'ten'"),
        (lambda: watcher.evidence(10, 1, 0.0), "rate = 0.0"),
        (lambda: watcher.evidence(10, 1, math.nan), "rate = nan"),
        (lambda: watcher.evidence(10, 1, 0.03, "over"), "side = 'over'"),
        (lambda: watcher.evidence([1, 2], [1, 1, 1], 0.03), "do not broadcast"),
        (lambda: watcher.confidence_bounds(10, 1, 0.0), "risk = 0.0"),
        (lambda: watcher.confidence_bounds(10, 1, 1.0), "risk = 1.0"),
        (lambda: watcher.confidence_bounds(10, 1, [0.1, math.nan]), "risk = nan"),
        (lambda: watcher.confidence_bounds(10, 11, 0.1), "errors = 11"),
        (lambda: watcher.confidence_bounds(math.inf, 1, 0.1), "labels = inf"),
        (lambda: watcher.exact_bounds(10, 11, 0.1), "errors = 11"),
        (lambda: watcher.exact_bounds(10, 1, 2), "risk = 2.0"),
        (lambda: watcher.operating_characteristics([0.03, 0.04], 0.1, 0.1, 10), "a single number is needed"),
    ],
)
def test_nonsense_is_a_value_error_that_names_the_argument(call, named):
    """Impossible counts, NaN, risks and rates outside (0, 1), unknown sides."""
    with pytest.raises(ValueError, match=named.replace(".", r"\.")):
        call()
