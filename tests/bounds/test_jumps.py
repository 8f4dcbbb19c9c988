"""Delays after a healthy time stay within 1.10 of those tabled in method.md section 2.

Tolerance 0.03, risk 0.001, healthy at 0.02, in multiples of Wald's limit (the tabled figures: a prototype, 300 streams).
"""

from __future__ import annotations

import pytest
from bounds.jumps import DAY, mean_delay

DAILY_70 = {1.5: 1.79, 2: 2.00, 3: 2.36}
HEAVY = [
    (500, DAY, 1.5, 2.23),
    (500, DAY, 2, 2.64),
    (500, DAY, 3, 3.53),
    (125, DAY // 4, 1.5, 2.05),
    (125, DAY // 4, 2, 2.37),
    (125, DAY // 4, 3, 2.79),
]


@pytest.mark.parametrize("rise", DAILY_70)
def test_delays_at_70_labels_a_day(rise):
    """1,000 streams: the mean delay is at most 1.10 of the tabled one."""
    mean, error = mean_delay(70, DAY, rise, 1000, seed=31)

    assert error < 0.03
    assert mean <= 1.10 * DAILY_70[rise]


@pytest.mark.long
@pytest.mark.parametrize(("per_bucket", "bucket", "rise", "tabled"), HEAVY)
def test_delays_at_500_labels_a_day(per_bucket, bucket, rise, tabled):
    """The same at 500 labels a day, in daily buckets and in buckets of 6 hours."""
    mean, error = mean_delay(per_bucket, bucket, rise, 1000, seed=32)

    assert error < 0.03
    assert mean <= 1.10 * tabled
