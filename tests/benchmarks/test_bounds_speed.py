"""Speed of the statistics on one thread, as ratios within one run or as seconds of one core, best of three.

Processor time is measured: what else the machine does counts as little as possible.

`pytest -o addopts= tests/benchmarks/test_bounds_speed.py -s` prints the figures; docs/benchmarks.md records them.
"""

from __future__ import annotations

import time

import numpy as np
from peers import confseq
from scipy.stats import beta

import watcher
from watcher.bounds.deciding import labels_to_decide
from watcher.bounds.evidence import evidence
from watcher.bounds.windows import restarts, supports, totals

DAY = 86400
RESTARTS = restarts(364 * DAY, DAY)


def best(runs, work):
    times = []
    for _ in range(runs):
        start = time.process_time()
        work()
        times.append(time.process_time() - start)
    return min(times)


def pairs(number):
    rng = np.random.default_rng(1)
    n = rng.integers(1, 100_001, number)
    return n, rng.binomial(n, 0.03)


def cells(number, days):
    """A mixture: most healthy at half or two thirds of the tolerance, some at it, some that jump."""
    rng = np.random.default_rng(2)
    rates = rng.choice([0.015, 0.02, 0.028, 0.03, 0.05], number, p=[0.3, 0.4, 0.1, 0.1, 0.1])
    volumes = rng.choice([5, 20, 70, 500], number)
    n = rng.poisson(volumes[:, None], (number, days))
    return np.stack([n, rng.binomial(n, rates[:, None])], axis=-1)


def test_a_million_evidences():
    """1e6 evidences at one tolerance take at most 0.6 of one scipy.stats.beta.ppf call on the same values."""
    n, k = pairs(1_000_000)
    rows = np.stack([n, k], axis=-1)

    ours = best(3, lambda: evidence(rows, 0.03, "above"))
    theirs = best(3, lambda: beta.ppf(0.999, k + 1, n - k))

    print(f"\n1e6 evidences {ours:.3f} s, beta.ppf {theirs:.3f} s, ratio {ours / theirs:.3f}")
    assert ours <= 0.6 * theirs


def test_limits_against_the_library():
    """confidence_bounds gives at least 10 times the pairs a second of confseq's bernoulli_confidence_interval."""
    n, k = pairs(2000)
    code = (
        "import time, confseq.boundaries as b\n"
        "start = time.process_time()\n"
        "for n, k in argument: b.bernoulli_confidence_interval(k, n, 0.001, 1000)\n"
        "answer = time.process_time() - start"
    )
    many_n, many_k = pairs(20_000)

    theirs = min(confseq.ask(code, np.stack([n, k], axis=-1).tolist()) for _ in range(3)) / 2000
    ours = best(3, lambda: watcher.confidence_bounds(many_n, many_k, 0.001)) / 20_000

    print(f"\nconfidence_bounds {1 / ours:.0f} pairs/s, confseq {1 / theirs:.0f} pairs/s, ratio {theirs / ours:.1f}")
    assert theirs >= 10 * ours


def test_first_look_over_a_year():
    """Totals and supports of 100 cells x 365 buckets, from nothing: at most 10 s."""
    age = np.arange(365)[:, None] - np.arange(365) >= 6
    paths = cells(100, 365)

    def look():
        for path in paths:
            totals(path, 0.03, RESTARTS)
            supports(path, 0.03, 0.001 * 0.004, RESTARTS, long_enough=age)

    seconds = best(3, look)

    print(f"\nfirst look, 100 cells x 365 buckets: {seconds:.2f} s")
    assert seconds <= 10


def test_one_newly_sealed_bucket():
    """Totals and supports of 1,000 cells x 365 windows after one new bucket: at most 10 s."""
    age = (364 - np.arange(365) >= 6)[None]
    paths = cells(1000, 365)

    def look():
        for path in paths:
            totals(path, 0.03, RESTARTS, since=364)
            supports(path, 0.03, 0.001 * 0.0004, RESTARTS, since=364, long_enough=age)

    seconds = best(3, look)

    print(f"\none new bucket, 1,000 cells x 365 windows: {seconds:.2f} s")
    assert seconds <= 10


def test_operating_characteristics():
    """Tolerance 0.03 to 100,000 labels: at most 5 s, at the tolerance itself and at 1.5x."""
    seconds = max(
        best(3, lambda rate=rate: watcher.operating_characteristics(0.03, 0.001, rate, 100_000))
        for rate in (0.03, 0.045)
    )

    print(f"\noperating characteristics to 100,000 labels: {seconds:.2f} s")
    assert seconds <= 5


def test_labels_to_decide():
    """1,000 cells a day: at most 30 ms each."""
    life = cells(100, 200).sum(axis=1).tolist()

    seconds = best(3, lambda: [labels_to_decide(n, k, 0.03, 0.001 * 0.004) for n, k in life]) / len(life)

    print(f"\nlabels_to_decide: {1e3 * seconds:.1f} ms a cell")
    assert seconds <= 0.030
