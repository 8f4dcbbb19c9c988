"""Parts of the risk, in exact fractions."""

from __future__ import annotations

from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from watcher.bounds.parts import declared_parts, discovered_part, part_of_whole

weights = st.lists(st.decimals("0.000001", "1000000", allow_nan=False, places=6).map(str), min_size=1, max_size=30)


def test_the_whole():
    """All of the risk without slices, half with slices."""
    assert part_of_whole(has_slices=False) == 1
    assert part_of_whole(has_slices=True) == Fraction(1, 2)


def test_declared_values_share_two_fifths():
    """Equally when the weights are equal, over all columns together; else in proportion."""
    assert declared_parts(["1"] * 5) == (Fraction(2, 25),) * 5
    assert declared_parts(["0.1", "0.3"]) == (Fraction(1, 10), Fraction(3, 10))
    assert declared_parts([]) == ()


def test_discovered_values_telescope():
    """1/(10 i (i + 1)): after i values 1/(10 (i + 1)) is left."""
    spent = Fraction(0)
    for i in range(1, 500):
        spent += discovered_part(i)
        assert Fraction(1, 10) - spent == Fraction(1, 10 * (i + 1))


@given(weights, st.integers(0, 300))
def test_the_parts_never_exceed_the_risk(declared, discovered):
    """Whole, declared and discovered parts sum to less than 1, exactly."""
    parts = [
        part_of_whole(has_slices=True),
        *declared_parts(declared),
        *(discovered_part(i) for i in range(1, discovered + 1)),
    ]

    assert sum(declared_parts(declared)) == Fraction(2, 5)
    assert sum(parts) < 1


@pytest.mark.parametrize("weight", ["0", "-1", "x", "NaN", "Infinity", ""])
def test_a_weight_that_is_no_positive_number_is_refused(weight):
    """The message shows the weight."""
    with pytest.raises(ValueError, match="a positive decimal number is needed"):
        declared_parts(["1", weight])


def test_discovered_values_are_numbered_from_one():
    """Order 0 is refused."""
    with pytest.raises(ValueError, match="numbered from 1"):
        discovered_part(0)
