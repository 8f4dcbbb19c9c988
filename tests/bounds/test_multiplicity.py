"""Many slices: the e-BH list, its false discovery rate, and the misuse that breaks it."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binomtest, false_discovery_control

from watcher.bounds.evidence import evidence
from watcher.bounds.multiplicity import e_bh, false_breach_bound
from watcher.bounds.parts import DECLARED, declared_parts, discovered_part

BENJAMINI_HOCHBERG = np.array(
    [
        0.0001,
        0.0004,
        0.0019,
        0.0095,
        0.0201,
        0.0278,
        0.0298,
        0.0344,
        0.0459,
        0.3240,
        0.4262,
        0.5719,
        0.6528,
        0.7590,
        1.0,
    ]
)
"""The 15 p-values of Benjamini, Hochberg 1995, section 4.1 (from memory, R run)."""


@pytest.mark.parametrize(
    ("values", "count"),
    [
        # Wang, Ramdas 2022, JRSS B 84:822 (rule read in public code; values computed).
        ([100, 60, 30, 5, 1], 2),
        ([100, 40, 30, 5, 1], 1),
        ([80, 60, 39, 25, 20], 5),
        ([20, 20, 20, 20, 20], 5),
        ([100, 1, 1, 1, 1], 1),
        ([99, 1, 1, 1, 1], 0),
    ],
)
def test_number_of_rejections(values: list[float], count: int) -> None:
    """The k largest are listed, k the largest with the k-th e-value at least K/(fdr k); whatever their order."""
    listed = e_bh(np.log(values), 0.05)

    assert listed.sum() == count
    assert listed.tolist() == [i < count for i in range(5)]
    assert e_bh(np.log(values[::-1]), 0.05).tolist() == listed.tolist()[::-1]


def test_reciprocals_of_p_values_give_the_classical_step_up() -> None:
    """On 1/p the rule is Benjamini-Hochberg: 4 rejections in their example (Bonferroni: 3), .02 .04 .04 .02 in Holm's."""
    holm = np.array([0.01, 0.04, 0.03, 0.005])
    adjusted = [min(a / 1000 for a in range(1, 1000) if e_bh(-np.log(holm), a / 1000)[i]) for i in range(4)]

    assert e_bh(-np.log(BENJAMINI_HOCHBERG), 0.05).sum() == 4
    assert (BENJAMINI_HOCHBERG <= 0.05 / 15).sum() == 3
    # On a grid of 0.001; ties at a level are decided by the last bit of a logarithm.
    assert adjusted == pytest.approx([0.02, 0.04, 0.04, 0.02], abs=1.1e-3)
    assert adjusted == pytest.approx(false_discovery_control(holm), abs=1.1e-3)


def test_valid_e_values_list_less() -> None:
    """p-values turned into e-values (p^-.5/2, Vovk, Wang 2021: 2.2361 at .05, 5.0 at .01) cannot list more than 1/p would."""
    calibrated = 0.5 / np.sqrt([0.05, 0.01])

    assert calibrated == pytest.approx([2.2361, 5.0], abs=5e-5)
    assert e_bh(np.log(0.5 / np.sqrt(BENJAMINI_HOCHBERG)), 0.05).sum() <= 4


def test_shapes_and_edges() -> None:
    """Rows are judged one by one; no slice, -inf and +inf are allowed."""
    rows = np.log([[100, 60, 30, 5, 1], [99, 1, 1, 1, 1]])

    assert e_bh(rows).tolist() == [e_bh(row).tolist() for row in rows]
    assert e_bh(np.zeros(0)).shape == (0,)
    assert e_bh([-np.inf, np.inf]).tolist() == [False, True]
    assert not e_bh([-np.inf, -np.inf]).any()


@pytest.mark.parametrize(
    ("totals", "fdr", "name"), [([0.0, math.nan], 0.05, "totals"), (1.0, 0.05, "totals"), ([1.0], 0.0, "fdr")]
)
def test_nonsense_is_refused_by_name(totals: object, fdr: float, name: str) -> None:
    """A ValueError names the argument."""
    with pytest.raises(ValueError, match=name):
        e_bh(totals, fdr)


def test_union_bound_over_releases() -> None:
    """R releases of M promises: at most R*M*risk, never above 1."""
    assert false_breach_bound([0.001] * 12) == pytest.approx(0.012)
    assert false_breach_bound([0.5, 0.7]) == 1.0
    with pytest.raises(ValueError, match="risks"):
        false_breach_bound([0.0])


def test_parts_are_an_alpha_spending() -> None:
    """1/(k(k+1)) spends .5, .16667, .08333, .0090909 of the part at k = 1, 2, 3, 10 (check values, section 7; computed)."""
    spent = [float(discovered_part(k)) * 10 * 0.05 for k in (1, 2, 3, 10)]

    assert spent == pytest.approx([0.025, 0.0083333, 0.0041667, 0.00045455], abs=5e-8)
    assert sum(declared_parts(["1", "2", "0.5"])) == DECLARED


def _slices(seed: int, runs: int, nulls: int, broken: int, looks: int) -> np.ndarray:
    """Evidence (runs, slices, looks) at 0.05, a look every 20 labels: nulls at the tolerance, some slices at three times it.

    At half of the labels all slices share one draw, so they depend on one another while each is a fair sequence.
    """
    rng = np.random.default_rng(seed)
    rates = np.where(np.arange(nulls + broken) < nulls, 0.05, 0.15)[:, None]
    errors = np.empty((runs, nulls + broken, looks), dtype=np.int64)
    for run in range(runs):
        shared, own = rng.random((1, 20 * looks)), rng.random((nulls + broken, 20 * looks))
        draws = np.where(rng.random((1, 20 * looks)) < 0.5, shared, own)
        errors[run] = (draws < rates).reshape(nulls + broken, looks, 20).sum(axis=-1)
    n = 20 * np.arange(1, looks + 1)
    return evidence(np.stack(np.broadcast_arrays(n, errors.cumsum(axis=-1)), axis=-1), 0.05, "above")


def test_false_discovery_rate() -> None:
    """On current totals of 60 dependent slices, 54 true nulls, the mean share of false ones is at most 5%; 300 runs.

    The 1% upper confidence limit of the mean is compared, so chance fails a correct rule with probability below 0.01.
    """
    totals = _slices(61, 300, 54, 6, 60)
    listed = e_bh(totals[..., -1], 0.05)
    false = listed[:, :54].sum(axis=1) / np.maximum(listed.sum(axis=1), 1)

    assert false.mean() - 2.33 * false.std() / math.sqrt(300) <= 0.05
    assert listed[:, 54:].mean() > 0.5


def test_running_maxima_break_the_list() -> None:
    """Maxima over time are no e-values: some dependence makes their list wrong in over 5% of reports, the current one's not.

    200 slices, each by itself a fair sequence at the tolerance. Paths from one pool of such sequences are handed out so that
    k slices have their maxima just over 200/(0.05 k) together (the worst dependence of Benjamini, Yekutieli 2001).
    """
    rng, slices, fdr, reports = np.random.default_rng(62), 200, 0.05, 4000
    n = np.unique(np.geomspace(10, 30_000, 120).astype(np.int64))
    errors = rng.binomial(np.diff(n, prepend=0), 0.05, (20_000, n.size)).cumsum(axis=1)
    pool = evidence(np.stack(np.broadcast_arrays(n, errors), axis=-1), 0.05, "above")
    maxima, current = pool.max(axis=1), pool[:, -1]
    together = np.arange(1, slices + 1)
    kind = np.searchsorted(-np.log(slices / (fdr * together)), -maxima) + 1
    chances = np.bincount(kind, minlength=slices + 2)[1 : slices + 1] / len(pool) * slices / together
    paths = rng.choice(np.flatnonzero(kind > slices), (reports, slices))
    for report, k in enumerate(rng.choice(slices + 1, reports, p=[1 - chances.sum(), *chances]).tolist()):
        if k:
            paths[report, :k] = rng.choice(np.flatnonzero(kind == k), k)
    wrong = [int(e_bh(values[paths], fdr).any(axis=1).sum()) for values in (current, maxima)]

    assert np.exp(current).mean() < 1.2
    assert np.exp(maxima).mean() > 3.0
    assert binomtest(wrong[0], reports, fdr, alternative="greater").pvalue > 1e-4
    assert binomtest(wrong[1], reports, fdr, alternative="greater").pvalue < 1e-6
