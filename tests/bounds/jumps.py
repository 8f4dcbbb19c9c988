"""Delay of the shipped windowed rule after a jump that follows a long healthy time."""

from __future__ import annotations

import math

import numpy as np
from scipy.special import rel_entr

from watcher.bounds.windows import restarts, totals

DAY = 86400
TOLERANCE, RISK, HEALTHY = 0.03, 0.001, 0.02
WEEK = 7 * DAY


def wald(rise):
    rate = rise * TOLERANCE
    return math.log(1 / RISK) / float(rel_entr(rate, TOLERANCE) + rel_entr(1 - rate, 1 - TOLERANCE))


def mean_delay(per_bucket, bucket, rise, streams, seed):
    """Labels from a jump between weeks 28 and 49 to the end of the crossing bucket: mean, standard error / Wald."""
    rng = np.random.default_rng(seed)
    number, threshold = restarts(52 * WEEK, bucket), math.log(1 / RISK)
    after = math.ceil(12 * wald(rise) / per_bucket)
    delays = []
    for _ in range(streams):
        jump = int(rng.integers(28 * WEEK // bucket, 49 * WEEK // bucket))
        rate = np.where(np.arange(jump + after) < jump, HEALTHY, rise * TOLERANCE)
        buckets = np.stack([np.full(jump + after, per_bucket), rng.binomial(per_bucket, rate)], axis=-1)
        crossed = np.flatnonzero(totals(buckets, TOLERANCE, number) >= threshold)
        assert crossed.size, "every jump must be noticed within the stream"
        assert crossed[0] >= jump, "a false breach before the jump: at this risk and rate it does not happen"
        delays.append((crossed[0] - jump + 1) * per_bucket)
    return np.mean(delays) / wald(rise), np.std(delays) / math.sqrt(streams) / wald(rise)
