"""Injected drift: consistent between whole and slices, stable from look to look, of the stated size."""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import replace
from typing import Any

import pytest
from rehearsal.history import DAY, START, Remembered, rows, source, uncorrected, watched

from watcher.errors import UsageError
from watcher.look import question
from watcher.records import Counts, Question, Tally
from watcher.sources.base import Source
from watcher.sources.injected import InjectedSource, Injection, chance_of

END = START + 20 * DAY
FROM = START + 10 * DAY


def asked(now: int = END, open_from: int = START, **more: Any) -> Question:
    """The question of a look; `more` replaces its parts."""
    return replace(question(watched()[0].terms, open_from, now, at_given=True), **more)


def tally(found: Source, *more: Question) -> Tally:
    """The answer to the last of the questions, asked one after the other."""
    for each in more or (asked(),):
        [answer] = found.tally([each])
    return answer


def counts(found: Tally) -> dict[tuple[str, str, int], Counts]:
    """By cell and bucket."""
    return {(row.column, row.value, row.bucket): row.counts for row in found.cells}


def added(injection: Injection, *more: Question, inner: Source | None = None) -> Counter[tuple[str, str, int]]:
    """Errors that the injection added, by cell and bucket."""
    plain = source() if inner is None else inner
    last = (more or (asked(),))[-1]
    before, after = counts(tally(plain, last)), counts(tally(InjectedSource(plain, injection, END), *(more or (last,))))
    assert before.keys() == after.keys()
    change: Counter[tuple[str, str, int]] = Counter()
    for key, was in before.items():
        now = after[key]
        change[key] = now.errors - was.errors
        assert replace(now, errors=was.errors, misses=was.misses, false_alarms=was.false_alarms) == was
        assert 0 <= now.errors <= now.labels
    return change


def sums(change: Counter[tuple[str, str, int]], column: str) -> Counter[int]:
    """By bucket, over the values of a column."""
    found: Counter[int] = Counter()
    for (name, _, bucket), number in change.items():
        if name == column:
            found[bucket] += number
    return found


@pytest.mark.parametrize("part", [("", ""), ("depot", "Birch"), ("carrier", "Wren")])
def test_whole_and_every_column_change_by_the_same_number(part: tuple[str, str]) -> None:
    """Bucket by bucket; nothing before the start; only labels that exist; with a slice no other value of its column."""
    change = added(Injection(FROM, factor=4, column=part[0], value=part[1]))

    whole = sums(change, "")
    assert whole == sums(change, "depot") == sums(change, "carrier")
    assert sum(whole.values()) > 0
    assert {bucket for bucket, number in whole.items() if number} <= set(range(FROM, END, DAY))
    if part[0]:
        touched = {value for (column, value, _), number in change.items() if column == part[0] and number}
        assert touched == {part[1]}
        other = "carrier" if part[0] == "depot" else "depot"
        assert len({value for (column, value, _), number in change.items() if column == other and number}) > 1


def test_the_rate_is_the_stated_one() -> None:
    """Flips are binomial: z of their number over 200 seeds lies within 5 standard deviations (two-sided 6e-7)."""
    plain, total = source(), 0
    injected = [InjectedSource(plain, Injection(FROM, rate=0.10, seed=seed), END) for seed in range(200)]
    before = tally(plain)
    for each in injected:
        total += sum(c.errors for key, c in counts(tally(each)).items() if not key[0])
    pool = sum(c.labels - c.errors for key, c in counts(before).items() if not key[0] and key[2] >= FROM)
    errors = sum(c.errors for key, c in counts(before).items() if not key[0])
    [found] = injected[0].applied.values()
    early = [c for key, c in counts(before).items() if not key[0] and key[2] < FROM]
    rate = sum(c.errors for c in early) / sum(c.labels for c in early)

    assert found.errors / found.labels == rate
    assert found.before
    assert found.chance == pytest.approx((0.10 - rate) / (1 - rate), abs=1e-12)
    n, q = 200 * pool, found.chance
    assert abs(total - 200 * errors - n * q) < 5 * math.sqrt(n * q * (1 - q))


def test_each_value_gets_its_share() -> None:
    """Flips of Wren among all, given their number, are hypergeometric in each bucket: within 5 deviations (6e-7)."""
    plain = source()
    pools = {key: c.labels - c.errors for key, c in counts(tally(plain)).items() if key[2] >= FROM}
    z = variance = 0.0
    for seed in range(100):
        change = added(Injection(FROM, rate=0.2, seed=seed), inner=plain)
        for bucket in (FROM, FROM + DAY):
            whole, part, flips = pools["", "", bucket], pools["carrier", "Wren", bucket], change["", "", bucket]
            share = part / whole
            z += change["carrier", "Wren", bucket] - flips * share
            variance += flips * share * (1 - share) * (whole - flips) / (whole - 1)

    assert abs(z) < 5 * math.sqrt(variance)


def test_more_labels_add_and_take_nothing_back() -> None:
    """From look to look the flips of a bucket only grow while its labels do, and the last look says what one look says
    about consistency: whole and columns agree at every look."""
    injection, inner = Injection(FROM, factor=5), uncorrected()
    drift, before = InjectedSource(inner, injection, END), Counter[tuple[str, str, int]]()
    grown = 0
    for now in range(FROM + DAY // 2, FROM + 5 * DAY, DAY // 2):
        plain = counts(tally(inner, asked(now)))
        now_flips = Counter({key: c.errors - plain[key].errors for key, c in counts(tally(drift, asked(now))).items()})
        assert all(now_flips[key] >= number for key, number in before.items())
        assert sums(now_flips, "") == sums(now_flips, "depot") == sums(now_flips, "carrier")
        grown += now_flips != before
        before = now_flips

    assert grown > 4


def test_corrected_labels_keep_every_view_consistent() -> None:
    """Where a correction takes a correct label back the bucket is drawn afresh: no view exceeds its labels."""
    drift = InjectedSource(source(), Injection(FROM, factor=20), END)
    for now in range(FROM + DAY, FROM + 5 * DAY, DAY // 2):
        found = counts(tally(drift, asked(now)))
        for bucket in range(FROM, now, DAY):
            whole = found.get(("", "", bucket), Counts())
            for column in ("depot", "carrier"):
                own = [c for key, c in found.items() if key[0] == column and key[2] == bucket]
                assert sum(c.errors for c in own) == whole.errors <= whole.labels


def test_the_same_seed_gives_the_same_history_and_another_seed_another() -> None:
    """Sealed buckets being left out of the question changes nothing for the others."""
    injection = Injection(FROM, factor=4, seed=3)
    once = added(injection)
    late = added(injection, asked(open_from=FROM + 5 * DAY))

    assert once == added(injection)
    assert {key: number for key, number in once.items() if key[2] >= FROM + 5 * DAY} == late
    assert once != added(replace(injection, seed=4))


def test_doing_better_flips_wrong_labels() -> None:
    """Half the rate takes errors away, of every view alike."""
    change = added(Injection(FROM, factor=0.3))

    assert sum(sums(change, "").values()) < 0
    assert sums(change, "") == sums(change, "depot") == sums(change, "carrier")


@pytest.mark.parametrize(("measure", "moved", "kept"), [("miss", "misses", "false_alarms"), ("false-alarm", "false_alarms", "misses")])  # fmt: skip
def test_a_measure_about_one_class_changes_that_class_alone(measure: str, moved: str, kept: str) -> None:
    """Misses among the positive, false alarms among the negative; errors follow."""
    one = asked(measure=measure, positive="yes")
    plain = counts(tally(source(), one))
    found = counts(tally(InjectedSource(source(), Injection(FROM, factor=4), END), one))
    grown = 0
    for key, was in plain.items():
        now = found[key]
        change = getattr(now, moved) - getattr(was, moved)
        assert now.errors - was.errors == change >= 0
        assert getattr(now, kept) == getattr(was, kept)
        grown += change

    assert grown > 0


def test_an_error_rate_with_a_positive_class_keeps_its_two_kinds_of_errors_apart() -> None:
    """errors = misses + false alarms before and after, and both grow."""
    found = counts(tally(InjectedSource(source(), Injection(FROM, factor=6), END), asked(positive="yes")))
    plain = counts(tally(source(), asked(positive="yes")))

    assert all(c.errors == c.misses + c.false_alarms and c.misses <= c.positives for c in found.values())
    for name in ("misses", "false_alarms"):
        assert sum(getattr(c, name) for c in found.values()) > sum(getattr(c, name) for c in plain.values())


@pytest.mark.parametrize(
    ("injection", "labels", "errors", "word"),
    [
        (Injection(0, factor=2), 0, 0, "no labelled sample"),
        (Injection(0, factor=2), 50, 0, "rate=0.05"),
        (Injection(0, factor=20), 50, 10, "at most 1"),
    ],
)
def test_what_has_no_chance_is_refused(injection: Injection, labels: int, errors: int, word: str) -> None:
    """Nothing labelled, a multiple of nothing, a rate above 1."""
    with pytest.raises(UsageError, match=word):
        chance_of(injection, ("triage", "1"), labels, errors, before=True)


def test_the_chance_takes_the_rate_to_the_target() -> None:
    """rate + (1 - rate) chance = target upwards, rate (1 - chance) = target downwards; by hand: 0.02 to 0.06 is 0.04/0.98."""
    up = chance_of(Injection(0, factor=3), ("a", "1"), 100, 2, before=True)
    down = chance_of(Injection(0, rate=0.005), ("a", "1"), 100, 2, before=True)

    assert (up.worse, down.worse) == (True, False)
    assert up.chance == pytest.approx(0.04 / 0.98)
    assert down.chance == pytest.approx(0.75)


def test_losses_and_clusters_are_refused() -> None:
    """What cannot be done consistently is said, not approximated."""
    drift = InjectedSource(source(), Injection(FROM, factor=2), END)
    columns = asked().columns
    with pytest.raises(UsageError, match="loss"):
        drift.tally([asked(measure="loss")])
    with pytest.raises(UsageError, match="cluster"):
        drift.tally([asked(columns=replace(columns, cluster="depot"), n_max=5, cluster_span=DAY)])


def test_a_value_that_changes_between_revisions_is_refused() -> None:
    """Rows that were Birch and are Cedar now would be flipped in Birch, where the promise no longer counts them."""
    moved = [row for row in rows() if row["revision"] == "1"]
    moved += [row | {"revision": "2", "depot": "Cedar"} for row in moved if row["depot"] == "Birch"]
    drift = InjectedSource(Remembered(moved), Injection(FROM, rate=0.9, column="depot", value="Birch"), END)
    with pytest.raises(UsageError, match="between revisions"):
        tally(drift)


def test_everything_else_is_the_source_itself() -> None:
    """Name, columns, rejected rows and the survey pass through."""
    inner = source()
    drift = InjectedSource(inner, Injection(FROM, factor=2), END)

    assert (drift.name, drift.columns(), drift.signature()) == (inner.name, inner.columns(), inner.signature())
    assert drift.survey(asked()) == inner.survey(asked())
    assert drift.rejected(asked(), "bad-time") == inner.rejected(asked(), "bad-time")
