from __future__ import annotations

from datetime import date, timedelta
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st
from wording.invented import DAY, utc

from watcher.wording import numbers

rates = st.floats(0.0, 1.0)


def value(text: str) -> Fraction:
    return Fraction(text.rstrip("%").replace(",", "")) / 100


class TestPercent:
    @pytest.mark.parametrize(
        ("given_", "shown"), [(0.0257, "2.6%"), (0.1, "10.0%"), (0.0053, "0.53%"), (0.00012, "0.012%"), (0.0, "0.0%")]
    )
    def test_digits(self, given_: float, shown: str) -> None:
        """One decimal from 1% on, two significant digits below."""
        assert numbers.percent(given_) == shown

    @given(rates)
    def test_limits_are_rounded_outward(self, given_: float) -> None:
        """A lower limit never grows by rounding, an upper one never shrinks."""
        exact = Fraction(repr(given_))

        assert value(numbers.percent(given_, down=True)) <= exact <= value(numbers.percent(given_, up=True))

    @given(rates, rates)
    def test_a_span_contains_its_interval(self, first: float, second: float) -> None:
        """Both ends of a shown interval lie on or outside the real ones, at the same number of decimals."""
        low, high = sorted((first, second))
        lower, upper = numbers.limits(low, high)

        assert value(lower) <= Fraction(repr(low))
        assert value(upper) >= Fraction(repr(high))
        assert len(lower.partition(".")[2]) == len(upper.partition(".")[2])

    def test_a_limit_at_a_round_number_stays(self) -> None:
        """0.03 as an upper limit is 3.0%, not 3.1%, although its binary form lies a hair off."""
        assert numbers.percent(0.03, up=True) == "3.0%"
        assert numbers.percent(0.07, down=True) == "7.0%"

    def test_declared_rates_keep_their_digits(self) -> None:
        """A tolerance is shown as it was declared."""
        assert [numbers.rate(v) for v in (0.03, 0.0274, 0.005, 0.1)] == ["3%", "2.74%", "0.5%", "10%"]


class TestOneIn:
    def test_plain_chances(self) -> None:
        """Computed by hand: 0.001 * 0.2 is 1 in 5,000, 0.001 * 2/15 * 0.2 is 1 in 37,500."""
        assert numbers.one_in(0.0002) == "1 in 5,000"
        assert numbers.one_in(Fraction(1, 1000) * Fraction(2, 15) / 5) == "1 in 37,500"
        assert numbers.one_in(0.9) == "90.0%"

    @given(st.floats(1e-9, 0.5))
    def test_at_most_stays_true(self, chance: float) -> None:
        """The chance that is shown is never smaller than the real one (but for a relative 1e-9)."""
        count = int(numbers.one_in(chance).removeprefix("1 in ").replace(",", ""))

        assert count * chance <= 1 + 1e-8


class TestDates:
    def test_a_period_names_its_last_day(self) -> None:
        """The half-open span from 2 to 30 November ends with the 29th."""
        assert numbers.period(utc(2026, 11, 2), utc(2026, 11, 30), "UTC") == "2 to 29 November 2026"
        assert numbers.period(utc(2026, 11, 2), utc(2026, 12, 3), "UTC") == "2 November to 2 December 2026"
        assert numbers.period(utc(2026, 11, 2), utc(2027, 1, 1), "UTC") == "2 November to 31 December 2026"
        assert numbers.period(utc(2026, 12, 30), utc(2027, 1, 2), "UTC") == "30 December 2026 to 1 January 2027"
        assert numbers.period(utc(2026, 11, 2), utc(2026, 11, 3), "UTC") == "2 November 2026"

    def test_a_part_of_a_day_is_told_by_its_time(self) -> None:
        """A span that ends at six in the morning says so."""
        assert (
            numbers.period(utc(2026, 11, 2), utc(2026, 11, 4, 6), "UTC") == "2 November 2026 to 4 November 2026, 06:00"
        )
        assert numbers.last(utc(2026, 11, 4, 6), "UTC") == "4 November 2026, 06:00"

    def test_the_zone_decides_the_day(self) -> None:
        """23:00 UTC is the next day in Berlin (UTC+1 in November)."""
        assert numbers.day(utc(2026, 11, 29, 23), "Europe/Berlin") == "30 November 2026"

    @given(st.dates())
    def test_the_last_day_is_the_day_before_midnight(self, given_: date) -> None:
        """For an end at midnight the last day is the day before."""
        midnight = utc(max(given_.year, 2), given_.month, min(given_.day, 28))

        assert numbers.last(midnight, "UTC") == numbers.day(midnight - timedelta(days=1), "UTC")


@pytest.mark.parametrize(
    ("noun", "many"),
    [
        ("parcel", "parcels"),
        ("parcels", "parcels"),
        ("box", "boxes"),
        ("inquiry", "inquiries"),
        ("day", "days"),
        ("loss", "losses"),
    ],
)
def test_plurals(noun: str, many: str) -> None:
    """Plain English nouns, and nouns that were given in the plural already."""
    assert numbers.plural(noun) == many


def test_counts_and_spans() -> None:
    """Numbers carry their noun and their thousands."""
    assert numbers.counted(1, "label") == "1 label"
    assert numbers.counted(1204, "label") == "1,204 labels"
    assert numbers.duration(10 * DAY) == "10 days"
    assert numbers.duration(14 * DAY) == "2 weeks"
    assert numbers.amount(31.0) == "31"
    assert numbers.amount(1234.567) == "1,234.57"
    assert numbers.about(26933) == "27,000"
    assert numbers.nats(-0.761) == "−0.77"
    assert numbers.nats(float("-inf")) == "−∞"
