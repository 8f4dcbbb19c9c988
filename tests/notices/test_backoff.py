"""The plan of retries. Check values: the issue's words (10 minutes, two days, hourly, seven days), computed here."""

import itertools
from datetime import timedelta

from notices.memory import T0

from watcher.notices.backoff import next_try


def _failures(every_try_fails_until: timedelta) -> list[timedelta]:
    """Ages of a notice at its tries when each of them fails."""
    ages, now, tries = [], T0, 0
    while now - T0 <= every_try_fails_until:
        tries += 1
        ages.append(now - T0)
        again = next_try(tries, T0, now)
        if again is None:
            break
        now = again
    return ages


def test_the_first_delays_grow_and_are_capped_at_ten_minutes() -> None:
    """5 s, 15 s, 45 s, 135 s, 405 s, then ten minutes."""
    ages = _failures(timedelta(hours=1))
    delays = [int((b - a).total_seconds()) for a, b in itertools.pairwise(ages)]

    assert delays[:8] == [5, 15, 45, 135, 405, 600, 600, 600]


def test_for_two_days_no_gap_is_longer_than_ten_minutes_then_an_hour_until_seven_days() -> None:
    """Capped at 10 minutes for the first two days, then hourly; the last try falls on the seventh day, then it is dead."""
    ages = _failures(timedelta(days=30))
    gaps = list(itertools.pairwise(ages))

    assert max(b - a for a, b in gaps if a < timedelta(days=2)) == timedelta(minutes=10)
    assert {b - a for a, b in gaps if a >= timedelta(days=2)} == {timedelta(hours=1)}
    assert timedelta(days=7) <= ages[-1] < timedelta(days=7, hours=1)


def test_a_notice_that_waited_behind_others_past_seven_days_is_still_tried_once() -> None:
    """Only a failed try makes a notice dead: `next_try` is asked after a failure, never before a first try."""
    assert next_try(1, T0, T0 + timedelta(days=9)) is None
    assert next_try(1, T0, T0 + timedelta(days=6, hours=23)) == T0 + timedelta(days=7)


def test_a_great_number_of_tries_does_not_overflow() -> None:
    """The delay stays at its cap however often a notice was tried."""
    assert next_try(10**9, T0, T0 + timedelta(hours=1)) == T0 + timedelta(hours=1, minutes=10)
