"""When two texts are the same: the one rule, in Python, for what the configuration declares and for SQLite's own functions.

The other engines say the same in SQL (`dialects.py`); the tests hold all of them against rows made at random.
"""

from __future__ import annotations

import re
from datetime import UTC, datetime
from typing import Final

BLANKS: Final = " \t\r\n"
"""What is trimmed from both ends of every value."""
SPELLINGS: Final = (("true", ("True", "TRUE")), ("false", ("False", "FALSE")))
WHOLE: Final = "-?[0-9]+[.]0+"
"""A whole number written with a fraction of zeros, as tables of floating-point numbers do: 1.0 is 1."""
NUMBER: Final = "[+-]?([0-9]{1,30}([.][0-9]{0,30})?|[.][0-9]{1,30})([eE][+-]?[0-9]{1,2})?"
"""What every engine reads as the same double; longer or larger forms are not numbers here."""
STAMP: Final = "[0-9]{4}-[0-9]{2}-[0-9]{2}[T ]([01][0-9]|2[0-3]):[0-5][0-9]:[0-5][0-9]([.][0-9]{1,9})?"
"""RFC 3339 with a capital T or a blank, without its offset."""
OFFSET: Final = "([Zz]|[+-]([01][0-9]|2[0-3]):[0-5][0-9])"
COUNT: Final = "[0-9]{1,14}([.][0-9]{1,9})?"
SECONDS: Final = {"epoch-seconds": 1, "epoch-milliseconds": 1000}
"""Time format -> units a second."""

_whole = re.compile(WHOLE)
_number = re.compile(NUMBER)
_stamp = re.compile(STAMP)
_zoned = re.compile(STAMP + OFFSET)
_count = re.compile(COUNT)
_same: Final = {spelling: value for value, spellings in SPELLINGS for spelling in spellings}


def plain(text: str | None) -> str | None:
    """Return a trimmed text in its one spelling: whole numbers without fraction, true and false in small letters."""
    if text is None:
        return None
    if text in _same:
        return _same[text]
    return text.partition(".")[0] if _whole.fullmatch(text) else text


def text_of(value: str | None) -> str | None:
    """Return what a value counts as: trimmed, plain, None when nothing is left."""
    return plain(value.strip(BLANKS)) or None if value is not None else None


def number_of(text: str | None) -> float | None:
    """Return the double that a trimmed decimal text stands for, or None."""
    return float(text) if text is not None and _number.fullmatch(text) else None


def _wall(text: str) -> int | None:
    try:
        return int(datetime.fromisoformat(text[:19]).replace(tzinfo=UTC).timestamp())
    except ValueError:  # 30 February
        return None


def wall_of(text: str | None) -> int | None:
    """Return the wall clock seconds of a trimmed RFC 3339 text without an offset, fraction cut off; None if it is none."""
    return _wall(text) if text is not None and _stamp.fullmatch(text) else None


def zoned_of(text: str | None) -> int | None:
    """Return the seconds since 1970 of a trimmed RFC 3339 text with an offset, fraction cut off; None if it is none."""
    if text is None or not _zoned.fullmatch(text) or (wall := _wall(text)) is None:
        return None
    if text[-1] in "Zz":
        return wall
    seconds = int(text[-5:-3]) * 3600 + int(text[-2:]) * 60
    return wall - seconds if text[-6] == "+" else wall + seconds


def count_of(text: str | None, units: int) -> int | None:
    """Return the whole seconds of an unsigned count of `units` a second (1 or 1000), fraction cut off; None if unreadable."""
    match = _count.fullmatch(text) if text is not None else None
    return int(match[0].partition(".")[0]) // units if match else None
