"""Numbers and dates as people read them: thousands separated, limits rounded outward, no locale, no clock."""

from __future__ import annotations

from datetime import datetime, timedelta, tzinfo
from decimal import ROUND_CEILING, ROUND_FLOOR, ROUND_HALF_EVEN, Decimal
from fractions import Fraction
from typing import Final
from zoneinfo import ZoneInfo

MONTHS: Final = (
    "January",
    "February",
    "March",
    "April",
    "May",
    "June",
    "July",
    "August",
    "September",
    "October",
    "November",
    "December",
)
_MOST_DECIMALS: Final = 6
_UNITS: Final = ((7 * 86_400, "week"), (86_400, "day"), (3_600, "hour"), (60, "minute"), (1, "second"))
_SLACK: Final = Fraction(1, 10**9)


def percent(value: float, *, down: bool = False, up: bool = False, decimals: int | None = None) -> str:
    """A fraction in [0, 1] as a percentage: a lower limit with `down`, an upper one with `up`, else to the nearest.

    Without `decimals`: one decimal from 1% on, below it enough for two significant digits (at most 6 decimals).
    """
    number = Decimal(repr(float(value))) * 100
    places = _places(number, 2) if decimals is None else decimals
    rounding = ROUND_FLOOR if down else ROUND_CEILING if up else ROUND_HALF_EVEN
    return f"{number.quantize(Decimal(1).scaleb(-places), rounding=rounding)}%"


def rate(value: float) -> str:
    """A fraction that somebody declared, as a percentage with the digits that were declared: 0.03 is 3%."""
    text = f"{(Decimal(repr(float(value))) * 100).normalize():f}"
    return f"{text}%"


def limits(lower: float, upper: float) -> tuple[str, str]:
    """Both limits of an interval, rounded outward, with decimals that tell its width to two significant digits."""
    places = _places(Decimal(repr(float(upper))) * 100 - Decimal(repr(float(lower))) * 100, 2)
    return percent(lower, down=True, decimals=places), percent(upper, up=True, decimals=places)


def span(lower: float, upper: float) -> str:
    """An interval for a table: "1.0% – 5.1%", rounded outward."""
    return " – ".join(limits(lower, upper))


def amount(value: float) -> str:
    """A number of errors (or a total loss) with thousands separators; at most two decimals."""
    return f"{int(value):,}" if float(value).is_integer() else f"{value:,.2f}"


def about(value: int) -> str:
    """A number rounded to two significant digits: an estimate, not a count."""
    digits = max(0, len(str(abs(value))) - 2)
    return f"{round(value, -digits):,}"


def nats(value: float) -> str:
    """Evidence rounded down to two decimals; a true minus sign."""
    if value == float("-inf"):
        return "−∞"
    text = f"{Decimal(repr(float(value))).quantize(Decimal('0.01'), rounding=ROUND_FLOOR):,}"
    return text.replace("-", "−")


def one_in(chance: float | Fraction) -> str:
    """A chance as "1 in 5,000", at least as large as the chance itself; above one half as a percentage.

    Three significant digits, rounded so that "at most 1 in N" stays true (a relative 1e-9 is forgiven for decimal fractions).
    """
    exact = chance if isinstance(chance, Fraction) else Fraction(Decimal(repr(float(chance))))
    if exact > Fraction(1, 2):
        return percent(float(exact), up=True)
    count = int(1 / exact * (1 + _SLACK))
    digits = max(0, len(str(count)) - 3)
    return f"1 in {count // 10**digits * 10**digits:,}"


def plural(noun: str) -> str:
    """The plural of an English noun as a configuration gives it; a noun that looks plural already stays."""
    if noun.endswith("s") and not noun.endswith(("ss", "us", "is")):
        return noun
    if noun.endswith(("s", "x", "z", "ch", "sh")):
        return noun + "es"
    if noun.endswith("y") and noun[-2:-1] not in "aeiou":
        return noun[:-1] + "ies"
    return noun + "s"


def counted(count: int, noun: str) -> str:
    """A number with its noun: "1 label", "1,204 labels"."""
    return f"{count:,} {noun if count == 1 else plural(noun)}"


def duration(seconds: int) -> str:
    """A span in its largest whole unit: "10 days", "1 week"."""
    for size, name in _UNITS:
        if seconds and seconds % size == 0:
            return counted(seconds // size, name)
    return "0 seconds"


def day(moment: datetime, zone: str | tzinfo) -> str:
    """The date of a moment in a zone: "29 November 2026"."""
    local = moment.astimezone(_zone(zone))
    return f"{local.day} {MONTHS[local.month - 1]} {local.year}"


def short(at: datetime, zone: str | tzinfo) -> str:
    """The date of a moment in a zone where there is little room: "29 Nov 2026"."""
    local = at.astimezone(_zone(zone))
    return f"{local.day} {MONTHS[local.month - 1][:3]} {local.year}"


def moment(at: datetime, zone: str | tzinfo) -> str:
    """Date and time of a moment in a zone: "29 November 2026, 06:00"; midnight is left out."""
    local = at.astimezone(_zone(zone))
    return day(at, zone) if (local.hour, local.minute) == (0, 0) else f"{day(at, zone)}, {local:%H:%M}"


def period(start: datetime, end: datetime, zone: str | tzinfo) -> str:
    """The days of a half-open span in a zone: "2 to 29 November 2026"; the end is named by its last day.

    A span that does not end at midnight names the time at which it ends.
    """
    place = _zone(zone)
    local = end.astimezone(place)
    whole = (local.hour, local.minute, local.second) == (0, 0, 0)
    first = start.astimezone(place)
    last = (end - timedelta(seconds=1)).astimezone(place) if whole else local
    if not whole:
        return f"{day(start, place)} to {moment(end, place)}"
    if first.date() >= last.date():
        return day(end - timedelta(seconds=1), place)
    tail = f"{last.day} {MONTHS[last.month - 1]} {last.year}"
    if first.year != last.year:
        return f"{day(start, place)} to {tail}"
    if first.month != last.month:
        return f"{first.day} {MONTHS[first.month - 1]} to {tail}"
    return f"{first.day} to {tail}"


def last(end: datetime, zone: str | tzinfo) -> str:
    """The last day of a span by its half-open end; an end within a day is named with its time."""
    local = end.astimezone(_zone(zone))
    whole = (local.hour, local.minute, local.second) == (0, 0, 0)
    return day(end - timedelta(seconds=1), zone) if whole else moment(end, zone)


def _zone(zone: str | tzinfo) -> tzinfo:
    return ZoneInfo(zone) if isinstance(zone, str) else zone


def decimals_for(scale: float) -> int:
    """Decimals of percentages in a column of rates about as large as `scale`, so that its figures align."""
    return _places(Decimal(repr(float(scale))) * 100, 2)


def _places(number: Decimal, significant: int) -> int:
    if number <= 0:
        return 1
    return min(_MOST_DECIMALS, max(1, significant - 1 - number.adjusted()))
