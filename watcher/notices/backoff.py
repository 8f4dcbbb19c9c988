"""When to try again: a pure plan of delays."""

from __future__ import annotations

from datetime import datetime, timedelta
from typing import Final

FIRST: Final = timedelta(seconds=5)
FACTOR: Final = 3
CAP: Final = timedelta(minutes=10)
PATIENT: Final = timedelta(days=2)
"""Up to this age a notice is tried at least every `CAP`."""
HOURLY: Final = timedelta(hours=1)
GIVEN_UP: Final = timedelta(days=7)


def next_try(tries: int, created: datetime, now: datetime) -> datetime | None:
    """When a notice is tried again after its `tries`-th failure (>= 1) at `now`; None: it is dead.

    5 s, 15 s, 45 s, 2 min 15 s, 6 min 45 s, then every 10 minutes until the notice is two days old, hourly until it is
    seven days old. A failure always falls on a try: a notice that waited behind others past its seventh day is tried
    once before it is given up. `created` and `now` are aware.
    """
    age = now - created
    if age >= GIVEN_UP:
        return None
    if age >= PATIENT:
        return now + HOURLY
    # The exponent is bounded because tries grow without limit and the cap is reached at the sixth.
    steps = min(tries - 1, 10)
    return now + min(FIRST * int(FACTOR**steps), CAP)
