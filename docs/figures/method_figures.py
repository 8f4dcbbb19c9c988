"""Print the measured figures of docs/method-figures.md: the simulations of tests/bounds with more runs.

python docs/figures/method_figures.py        (some minutes on one core)
"""  # noqa: INP001  a script, not a package

# The simulations live in the tests, as helpers private to them.
# ruff: noqa: SLF001

from __future__ import annotations

import math
import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[2] / "tests"))

from bounds import test_clustered as clusters
from bounds import test_delay as delays
from bounds import test_horvitz as horvitz
from bounds import test_run_length as warnings
from bounds import test_weighted as weights

from watcher.bounds import release
from watcher.bounds.delay import delay_test
from watcher.bounds.evidence import evidence
from watcher.bounds.noise import breach_rate
from watcher.bounds.run_length import warning_sums
from watcher.bounds.simulation import Setting, false_breach, healthy_streams, labels_to_crossing

BAR = math.log(20)
"""Risk 0.05."""


def say(text: str) -> None:
    """One figure a line."""
    sys.stdout.write(text + "\n")
    sys.stdout.flush()


def ever(found: np.ndarray) -> str:
    """The share of runs that ever reach the bar, with its standard error."""
    share = (found >= BAR).any(axis=-1).mean()
    return f"{share:.3f} (s.e. {math.sqrt(max(share * (1 - share), 1e-9) / len(found)):.3f})"


def windows() -> None:
    """The shipped rule: false breaches and delays."""
    for volume, a_day in ((70, 1), (500, 1), (125, 4)):
        buckets, rng = 364 * a_day, np.random.default_rng(1)
        setting = Setting(0.03, 0.001, buckets - 1, volume)
        false = false_breach(setting, buckets, 20_000, rng)
        began = healthy_streams(setting, 0.02, rng.integers(196 * a_day, 343 * a_day, 2000), rng)
        ratios = [
            labels_to_crossing(began, 0.03 * rise, buckets, rng).mean() / limit
            for rise, limit in ((1.5, 2054), (2.0, 573), (3.0, 169))
        ]
        say(f"windows, {volume} a bucket, {a_day} buckets a day: delay/limit at 1.5x 2x 3x {np.round(ratios, 2)}")
        say(f"  false breach in a life at the tolerance {false.chance:.3g} (s.e. {false.error:.1g})")


def designs() -> None:
    """Validity at risk 0.05, naive treatments, power."""
    rng = np.random.default_rng(2)
    kind, error = weights._stream(rng, 2000, 4000, 0.3, 0.02 / 0.9, 0.9)
    table = weights._statistics(kind, error, 40)
    say(f"weights 9:1, false breach {ever(evidence(table, 0.05, 'above', design=weights.PLAN))}")
    say(f"weights 9:1, false support {ever(evidence(table, 0.05, 'below', design=weights.PLAN))}")
    n, weight = np.arange(1, 4001), np.where(kind, 0.111111, 9.0)
    share = (weight * error).cumsum(axis=1) / weight.cumsum(axis=1)
    naive = np.stack(np.broadcast_arrays(n, np.round(n * share)), axis=-1)[:, 39::40]
    say(f"  weighted share taken for uniform labels {ever(evidence(naive, 0.05, 'above'))}")
    plain = np.stack(np.broadcast_arrays(n, error.cumsum(axis=1)), axis=-1)[:, 39::40]
    say(f"  weights ignored {ever(evidence(plain, 0.05, 'above'))}")
    for share_, levels in ((0.5, ("0.25", "2.25")), (0.9, ("0.138889", "11.25"))):
        kind, error = weights._stream(rng, 600, 6000, 0.3, 0.02 / 0.9, share_)
        off = evidence(weights._statistics(kind, error, 50), 0.05, "above", design=weights.Weighted(levels))
        say(f"  weights 25% too large, {share_:.0%} of the labels on the hard tenth {ever(off)}")
    table = clusters._tables(rng, 2000, 30, 20, 0.05, 0.3)
    say(f"clusters 1..20, correlation .3, false breach {ever(evidence(table, 0.05, 'above', design=clusters.TWENTY))}")
    say(f"  false support {ever(evidence(table, 0.05, 'below', design=clusters.TWENTY))}")
    say(f"  as independent {ever(evidence(clusters._as_independent(table), 0.05, 'above'))}")
    table = clusters._tables(rng, 300, 30, 20, 0.10, 0.3)
    say(f"  power at twice the tolerance {ever(evidence(table, 0.05, 'above', design=clusters.TWENTY))}")
    for side, lost in (("above", (0.0, 0.4)), ("below", (0.4, 0.0))):
        world = horvitz.Missing(3, 0.05, *lost)
        say(
            f"selected, never labelled {lost}, {side} {ever(evidence(world.statistics, 0.05, side, design=horvitz.DESIGN))}"
        )
    world = horvitz.Missing(4, 0.06, 0.5, 0.0)
    dropped = world.statistics.copy()
    dropped[..., 3:] = 0
    say(
        f"  false support at 0.06 with missing labels dropped {ever(evidence(dropped, 0.05, 'below', design=horvitz.DESIGN))}"
    )
    errors = rng.binomial(50, 0.03 * 0.98 + 0.97 * 0.02, (2000, 100)).cumsum(axis=1)
    table = np.stack(np.broadcast_arrays(50 * np.arange(1, 101), errors), axis=-1)
    say(f"label noise of 2%, false breach {ever(evidence(table, breach_rate(0.03, (0.0, 0.02)), 'above'))}")
    say(f"  noise ignored {ever(evidence(table, 0.03, 'above'))}")


def power() -> None:
    """Labels to a breach with weights, and with pairs."""
    rng = np.random.default_rng(5)
    kind, error = weights._stream(rng, 1000, 4000, 0.33, 0.03, 0.5)
    half = evidence(weights._statistics(kind, error, 5), 0.03, "above", design=weights.Weighted(("0.2", "1.8")))
    _, error = weights._stream(rng, 1000, 4000, 0.33, 0.03, 0.1)
    uniform = evidence(weights._statistics(np.zeros_like(error), error, 5)[..., [0, 2]], 0.03, "above")
    found = [5 * (1 + (x >= math.log(1000)).argmax(axis=1)).mean() for x in (uniform, half)]
    say(
        f"hard tenth .33, else .03, tolerance .03, risk .001: uniform {found[0]:.0f}, half on the hard tenth {found[1]:.0f}"
    )
    n = 20 * np.arange(1, 1001)
    kinds = rng.multinomial(20, [0.04, 0.01, 0.02, 0.93], (400, n.size)).cumsum(axis=1)
    pairs = release.paired_statistic(n, kinds[..., 0], kinds[..., 1])
    paired = evidence(pairs, release.paired_rate(0.01), "above", design=release.PAIRS)
    base = release.relative(6000, 180, 0.01, 0.001, 0.0005)
    alone = evidence(
        np.stack(np.broadcast_arrays(n, kinds[..., 0] + kinds[..., 2]), axis=-1), base.breach_rate, "above"
    )
    found = [
        np.mean(n[(x >= bar).argmax(axis=1)]) for x, bar in ((paired, math.log(1000)), (alone, -math.log(base.risk)))
    ]
    say(
        f"old 3%, new 6%, margin 1 point: pairs {found[0]:.0f} labels, new alone against baseline + margin {found[1]:.0f}"
    )


def warning() -> None:
    """Run lengths and delays of the early warning."""
    for labels in (70, 500):
        with np.errstate(over="ignore"):
            found = warnings._run_lengths(
                np.random.default_rng(6), 400, labels, 0.03, 0.03, np.array([warnings.LOG_A])
            )[0]
        say(
            f"warning, A = 1095, {labels} a day at the tolerance: mean {found.mean():.0f} days (s.e. {found.std() / 20:.0f})"
        )
    rng, first = np.random.default_rng(7), []
    for _ in range(1500):
        sums = warning_sums(warnings._days(rng, 70, np.repeat([0.02, 0.06], [350, 150])), 0.03)
        first.append(70 * (1 + int((sums[350:] >= warnings.LOG_A).argmax())))
    say(f"  after 50 healthy weeks at 70 a day, 2x: {np.mean(first):.0f} labels (s.e. {np.std(first) / 1500**0.5:.0f})")
    for case in warnings.CUSUMS:
        log_bar, ratio = warnings._delay_ratio(case, 1500, 8)
        say(
            f"  p0 {case[0]} p1 {case[1]}: A {math.exp(log_bar):.0f} for ANSS(p0) {case[4]}; delay {ratio:.2f} x {case[5]}"
        )


def delay() -> None:
    """The delay test: level and speed."""
    for volume, late in ((70, 0.5), (70, 0.02), (300, 0.1), (8, 0.3)):
        found = delay_test(*delays._innocent(9, 2000, volume, 0.02, late))
        both = [flags.any(axis=1).mean() for flags in (found.depends, np.abs(found.z) >= 5)]
        say(
            f"delay innocent, {volume} a day, {late:.0%} late: flagged in a year {both[0]:.4f}; |z| >= 5 alone {both[1]:.4f}"
        )
    rng = np.random.default_rng(10)
    for volume in (10, 70, 300):
        errors = rng.binomial(volume, 0.02, (2000, 364))
        found = delay_test(errors, errors, volume - errors, np.zeros_like(errors))
        first = 1 + found.depends.argmax(axis=1)
        seen = np.quantile(first, [0.5, 0.9, 0.99])
        say(
            f"errors after 1 day, correct after 8, {volume} a day: flagged {found.depends.any(axis=1).mean():.3f}, sealed buckets {seen}"
        )


if __name__ == "__main__":
    for part in (windows, designs, power, warning, delay):
        part()
