"""Early warning: the sum over windows, the state machine, the mean run length, the delay against CUSUM."""

from __future__ import annotations

import math

import numpy as np
import pytest
from bounds.sequential import bernoulli_cusum_anss

from watcher.bounds.designs import per_label
from watcher.bounds.evidence import evidence
from watcher.bounds.mixture import RESTART
from watcher.bounds.run_length import CALM, advance_warning, walk_warnings, warning_sums
from watcher.bounds.run_length import Warning as Warned
from watcher.bounds.weighted import Weighted

DAY = 86400
LOG_A = math.log(1095)


def _ends(count: int) -> np.ndarray:
    return DAY * np.arange(1, count + 1)


def _days(rng: np.random.Generator, labels: int, rates: np.ndarray) -> np.ndarray:
    return np.stack([np.full(rates.size, labels), rng.binomial(labels, rates)], axis=-1)


@pytest.mark.parametrize("design", [None, Weighted(("0.5", "2"))])
def test_sum_is_over_all_windows(design: Weighted | None) -> None:
    """The prefix sums give log sum_j exp(evidence of window j), each window computed on its own, empty buckets included."""
    rng = np.random.default_rng(91)
    buckets = rng.binomial([30, 2] if design is None else [30, 2, 1], 0.6, (25, 2 if design is None else 3))
    buckets[[3, 4, 11]] = 0
    kwargs = {} if design is None else {"design": design}
    expected = []
    for t in range(25):
        windows = np.array([buckets[j : t + 1].sum(axis=0) for j in range(t + 1)])
        each = evidence(windows, 0.05, "above", mixture=RESTART, **kwargs)
        expected.append(np.logaddexp.reduce(each))

    found = warning_sums(buckets, 0.05, **kwargs)

    assert (found <= np.array(expected) + 1e-9).all()
    assert found == pytest.approx(np.array(expected), abs=2e-6)


def test_empty_buckets_just_add_a_window() -> None:
    """Without labels the sum after t buckets is t."""
    found = warning_sums(np.zeros((40, 2), dtype=int), 0.03)

    assert np.exp(found) == pytest.approx(np.arange(1, 41), rel=2e-6)


def test_walking_at_once_or_bucket_by_bucket_is_the_same() -> None:
    """One walk over two years, walks of a week and single steps give equal states and events."""
    rng = np.random.default_rng(92)
    rates = np.repeat([0.02, 0.07, 0.02, 0.05, 0.01], [200, 30, 150, 120, 230])
    buckets, ends = _days(rng, 70, rates), _ends(rates.size)
    once = walk_warnings(Warned(), buckets, 0, ends, 0.03, LOG_A)
    weekly, events = Warned(), []
    for since in range(0, rates.size, 7):
        until = min(since + 7, rates.size)
        weekly, new = walk_warnings(weekly, buckets[:until], since, ends[:until], 0.03, LOG_A)
        events += new
    state, single = Warned(), []
    for t in range(rates.size):
        state, kind = advance_warning(state, buckets, t, ends, 0.03, LOG_A)
        single += [(t, kind)] if kind else []

    assert once == (weekly, tuple(events)) == (state, tuple(single))
    assert [kind for _, kind in events] == ["warning", "warning-over", "warning", "warning-over"]


def test_raising_drops_all_windows() -> None:
    """The bucket that crosses raises the warning and starts afresh behind itself."""
    buckets = np.array([[70, 1], [70, 1], [70, 20], [70, 1]])
    state, kind = advance_warning(Warned(), buckets, 2, _ends(4), 0.03, LOG_A)

    assert kind == "warning"
    assert state == Warned(reset=3, standing=True, calm_since=3 * DAY)


def test_over_after_28_calm_days() -> None:
    """A standing warning ends 28 days after the fresh sum fell below sqrt(A), not a day earlier; the windows stay."""
    buckets = np.array([[70, 20], *[[70, 1]] * 40])
    state, events = walk_warnings(Warned(), buckets, 0, _ends(41), 0.03, LOG_A)

    assert events == ((0, "warning"), (28, "warning-over"))
    assert state == Warned(reset=1)


def test_a_restless_sum_starts_the_calm_again() -> None:
    """The fresh sum at or over sqrt(A), below A, makes the 28 days count anew."""
    buckets = np.array([[70, 20], *[[70, 1]] * 20, [70, 9], *[[70, 1]] * 60])
    sums = np.exp(warning_sums(buckets[1:], 0.03))
    _, events = walk_warnings(Warned(), buckets, 0, _ends(82), 0.03, LOG_A)
    restless = 1 + np.flatnonzero(sums >= math.sqrt(1095))

    assert sums.max() < 1095
    assert restless.size > 0
    assert events == ((0, "warning"), (int(restless[-1]) + CALM // DAY, "warning-over"))


def test_a_further_crossing_makes_no_event() -> None:
    """While the warning stands, the sum crosses A again: windows dropped, no second event, calm counts anew."""
    buckets = np.array([[70, 20], [70, 20], *[[70, 1]] * 40])
    state, events = walk_warnings(Warned(), buckets[:2], 0, _ends(2), 0.03, LOG_A)
    _, later = walk_warnings(state, buckets, 2, _ends(42), 0.03, LOG_A)

    assert state == Warned(reset=2, standing=True, calm_since=2 * DAY)
    assert events == ((0, "warning"),)
    assert later == ((29, "warning-over"),)


def test_state_is_made_of_integers_and_booleans() -> None:
    """What is kept between looks holds no float."""
    rng = np.random.default_rng(93)
    state, _ = walk_warnings(Warned(), _days(rng, 70, np.full(60, 0.06)), 0, _ends(60), 0.03, LOG_A)

    assert [type(getattr(state, name)) for name in state.__dataclass_fields__] == [int, bool, int]


@pytest.mark.parametrize(
    ("call", "name"),
    [
        (lambda: warning_sums(np.zeros((3, 3)), 0.03), "buckets"),
        (lambda: walk_warnings(Warned(reset=2), np.zeros((3, 2)), 1, _ends(3), 0.03, 5.0), "since"),
        (lambda: walk_warnings(Warned(), np.zeros((3, 2)), 4, _ends(3), 0.03, 5.0), "since"),
        (lambda: walk_warnings(Warned(), np.zeros((3, 2)), 0, _ends(2), 0.03, 5.0), "since"),
        (lambda: walk_warnings(Warned(), np.zeros((3, 2)), 0, _ends(3), 0.03, 0.0), "log_A"),
    ],
)
def test_nonsense_is_refused_by_name(call: object, name: str) -> None:
    """A ValueError names the argument."""
    with pytest.raises(ValueError, match=name):
        call()


def _run_lengths(
    rng: np.random.Generator, runs: int, labels: int, rate: float, tolerance: float, log_bars: np.ndarray
) -> np.ndarray:
    """Buckets (bars, runs) until the sum first reaches each bar, simulated with one number a shift: R = (R + 1)*factor.

    Independent of the product's code but for the mixture and the per-label cost.
    """
    costs = per_label(tolerance, "above", RESTART.shifts)
    factors = np.exp(np.arange(labels + 1)[:, None] * RESTART.shifts + labels * costs)
    sums, names = np.zeros((runs, RESTART.shifts.size)), np.arange(runs)
    found, bars = np.zeros((log_bars.size, runs)), np.exp(log_bars)
    t = 0
    while names.size:
        t += 1
        sums = (sums + 1.0) * factors[rng.binomial(labels, rate, names.size)]
        value = sums @ RESTART.weights
        reached = (value[None] >= bars[:, None]) & (found[:, names] == 0)
        found[:, names] += reached * t
        left = found[-1, names] == 0
        sums, names = sums[left], names[left]
    return found


@pytest.mark.parametrize(("labels", "tolerance", "A"), [(1, 0.1, 150), (10, 0.03, 60), (70, 0.03, 120)])
def test_mean_run_length_at_the_tolerance(labels: int, tolerance: float, A: int) -> None:
    """Exactly at the tolerance at least A buckets pass on average; 400 runs, one-sided significance 1e-4."""
    found = _run_lengths(np.random.default_rng(94), 400, labels, tolerance, tolerance, np.log([A]))[0]

    assert found.mean() + 3.8 * found.std() / math.sqrt(400) >= A
    assert found.mean() < 6 * A


def test_first_crossings_of_the_product_are_those_of_the_recursion() -> None:
    """`warning_sums` crosses at the very bucket where the recursion R = (R + 1)*factor does."""
    rng = np.random.default_rng(95)
    errors = rng.binomial(10, 0.05, (50, 400))
    buckets = np.stack(np.broadcast_arrays(10, errors), axis=-1)
    sums = warning_sums(buckets, 0.05)
    costs = per_label(0.05, "above", RESTART.shifts)
    state, crossings = np.zeros((50, RESTART.shifts.size)), np.full(50, -1)
    for t in range(400):
        state = (state + 1.0) * np.exp(errors[:, t, None] * RESTART.shifts + 10 * costs)
        crossings[(crossings < 0) & (state @ RESTART.weights >= 60)] = t
    ours = np.where((sums >= math.log(60)).any(axis=1), (sums >= math.log(60)).argmax(axis=1), -1)

    assert ours.tolist() == crossings.tolist()


@pytest.mark.long
def test_mean_run_length_as_shipped() -> None:
    """70 labels a day at the tolerance and A = 1095: over 1095 days pass on average; 300 runs, significance 1e-4."""
    found = _run_lengths(np.random.default_rng(96), 300, 70, 0.03, 0.03, np.array([LOG_A]))[0]

    assert found.mean() + 3.8 * found.std() / math.sqrt(300) >= 1095


def test_delay_as_shipped() -> None:
    """A doubled rate after 50 healthy weeks at 70 labels a day is warned of after 619 labels on average (log(A)/KL: 581).

    1500 runs gave 619 with a standard error of 8 (method.md's prototype: 671); here 150 runs, standard error 4%.
    """
    rng = np.random.default_rng(97)
    delays = []
    for _ in range(150):
        buckets = _days(rng, 70, np.repeat([0.02, 0.06], [350, 150]))
        first = int((warning_sums(buckets, 0.03)[350:] >= LOG_A).argmax())
        delays.append(70 * (first + 1))

    assert np.mean(delays) == pytest.approx(619, rel=0.15)


CUSUMS = [
    # p0, p1, m, h in steps of 1/m, exact ANSS(p0), exact ANSS(p1): Markov chain, model of Reynolds, Stoumbos 1999 (computed).
    (0.01, 0.022390, 65, 200, 2836.12, 325.90),
    (0.01, 0.034977, 50, 150, 5131.90, 173.39),
    (0.05, 0.111251, 13, 52, 1603.77, 93.59),
    (0.05, 0.097744, 14, 49, 777.52, 96.60),
    (0.10, 0.194358, 7, 28, 718.54, 59.81),
    (0.02, 0.043532, 33, 99, 1308.63, 165.72),
]


@pytest.mark.parametrize(("p0", "p1", "m", "steps", "at_p0", "at_p1"), CUSUMS)
def test_tabled_cusum_delays(p0: float, p1: float, m: int, steps: int, at_p0: float, at_p1: float) -> None:
    """The Markov chain of the Bernoulli CUSUM gives the tabled mean numbers of labels."""
    assert bernoulli_cusum_anss(p0, m, steps) == pytest.approx(at_p0, abs=0.006)
    # p1 is tabled to six places, which moves the mean by up to 0.012.
    assert bernoulli_cusum_anss(p1, m, steps) == pytest.approx(at_p1, abs=0.02)


def _delay_ratio(case: tuple[float, float, int, int, float, float], runs: int, seed: int) -> tuple[float, float]:
    """The bar with the CUSUM's mean run length at p0, found by simulation, and the mean delay at p1 over the tabled one."""
    p0, p1, _, _, at_p0, at_p1 = case
    rng = np.random.default_rng(seed)
    log_bars = np.log(at_p0) + np.linspace(-1.6, 0.2, 19)
    means = _run_lengths(rng, runs, 1, p0, p0, log_bars).mean(axis=1)
    log_bar = np.interp(math.log(at_p0), np.log(means), log_bars)
    delay = _run_lengths(rng, 2000, 1, p1, p0, np.array([log_bar]))[0].mean()
    return float(log_bar), float(delay / at_p1)


@pytest.mark.parametrize("case", [CUSUMS[2], CUSUMS[3], CUSUMS[4]])
def test_delay_against_cusum(case: tuple[float, float, int, int, float, float]) -> None:
    """Buckets of one label, the same mean run length at p0: the mean delay at p1 is at most 1.5 times the CUSUM's.

    The CUSUM is told p1, the warning is not. 250 runs at p0 (s.e. 7% of the run length, 1% of the delay).
    """
    assert _delay_ratio(case, 250, 98)[1] <= 1.5


@pytest.mark.long
@pytest.mark.parametrize("case", CUSUMS)
def test_delay_against_cusum_with_many_runs(case: tuple[float, float, int, int, float, float]) -> None:
    """As above for every tabled case, 1500 runs at p0 (s.e. 3% of the run length)."""
    log_bar, ratio = _delay_ratio(case, 1500, 99)

    assert ratio <= 1.5
    # The mean run length is at least the bar, as guaranteed (up to four standard errors).
    assert case[4] >= math.exp(log_bar) * 0.88


@pytest.mark.parametrize(
    ("A", "run_length", "delay"), [(20, 30.94, 19.46), (50, 65.62, 33.72), (100, 130.13, 50.52), (200, 254.94, 71.55)]
)
def test_shiryaev_roberts_of_one_shift(A: int, run_length: float, delay: float) -> None:
    """A single known shift .05 to .10 gives the simulated run lengths and delays of check values, section 3 (s.e. 1%).

    It is the mean run length of the recursion behind the warning: at least A, here 1.27 to 1.55 times A.
    """
    rng = np.random.default_rng(100)
    factors = np.array([0.90 / 0.95, 2.0])
    means = []
    for rate in (0.05, 0.10):
        value, alive, total = np.zeros(4000), np.arange(4000), 0
        while alive.size:
            total += alive.size
            value[alive] = (value[alive] + 1.0) * factors[(rng.random(alive.size) < rate).astype(int)]
            alive = alive[value[alive] < A]
        means.append(total / 4000)

    assert means == pytest.approx([run_length, delay], rel=0.06)
    assert means[0] >= A
