"""Whether a verdict derived again is the one recorded: states and counts exactly, computed figures within their rounding."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from typing import Any, Final

from watcher.ledger import canon
from watcher.records import Event

TOTAL_SLACK: Final = 2
"""Micro-nats."""
RATE_SLACK: Final = 2
"""1e-9."""
_DECIMAL: Final = re.compile(r"-?\d+(\.\d+(e-?\d+)?|e-?\d+)")
_SLACK: Final[Mapping[str, int | tuple[int, ...]]] = {
    "total": TOTAL_SLACK,
    "estimate": RATE_SLACK,
    "threshold": RATE_SLACK,
    "life": (RATE_SLACK, RATE_SLACK),
    "recent": (0, 0, 0, RATE_SLACK, RATE_SLACK),
    "support": (0, 0, RATE_SLACK),
    "breach": (0, 0, 0, 0, RATE_SLACK),
    "decide": (1, 1),
}
"""For each key of `standing.standing_body` that holds computed figures, place by place; times and counts have none."""


def body_differences(stored: Mapping[str, Any], derived: Mapping[str, Any]) -> list[str]:
    """The keys in which two standings (`standing.standing_body`) differ by more than their slack."""
    return [
        key for key in sorted(set(stored) | set(derived)) if not _same_figure(key, stored.get(key), derived.get(key))
    ]


def _same_figure(key: str, stored: Any, derived: Any) -> bool:
    slack = _SLACK.get(key, 0)
    if isinstance(slack, int):
        return _close(stored, derived, slack, tagged=RATE_SLACK)
    if stored is None or derived is None:
        return stored is derived
    if len(stored) != len(slack) or len(derived) != len(slack):
        return False
    return all(_close(a, b, s, tagged=RATE_SLACK) for a, b, s in zip(stored, derived, slack, strict=True))


def memory_differences(stored: Mapping[str, Any], derived: Mapping[str, Any]) -> list[str]:
    """The keys in which two memories differ."""
    return [
        key
        for key in sorted(set(stored) | set(derived))
        if key not in stored or key not in derived or not _same_memory(key, stored[key], derived[key])
    ]


def _same_memory(key: str, stored: Any, derived: Any) -> bool:
    if isinstance(stored, dict) and isinstance(derived, Mapping):
        return not memory_differences(stored, derived)
    slack = TOTAL_SLACK if key.endswith("_micronats") else 0
    return _close(stored, derived, slack, tagged=0)


def event_differences(stored: Sequence[Event], derived: Sequence[Event]) -> Iterator[str]:
    """What differs between the recorded events and the ones derived again, in order."""
    for n in range(max(len(stored), len(derived))):
        if n >= len(derived):
            yield f"{_name(stored[n])} was recorded and is not derived again"
        elif n >= len(stored):
            yield f"{_name(derived[n])} is derived and was not recorded"
        elif not _same_event(stored[n], derived[n]):
            yield f"{_name(stored[n])} was recorded, {_name(derived[n])} is derived: {stored[n]} / {derived[n]}"


def _name(event: Event) -> str:
    return f"{event.kind} of {event.promise!r} version {event.version!r} {event.column}={event.value!r}"


def _same_event(a: Event, b: Event) -> bool:
    keys = [(e.kind, e.promise, e.version, e.column, e.value, e.bucket) for e in (a, b)]
    return keys[0] == keys[1] and _close(canon.plain(a.facts), canon.plain(b.facts), 0, tagged=2000)


def _close(a: Any, b: Any, slack: int, *, tagged: int) -> bool:
    """Equal, integers within `slack`, tagged floats within `tagged` (1e-9) or a billionth, decimal text within 2e-6."""
    if isinstance(a, bool) or isinstance(b, bool) or a is None or b is None:
        return a is b
    if isinstance(a, int) and isinstance(b, int):
        return abs(a - b) <= slack
    if isinstance(a, str) and isinstance(b, str):
        return a == b or _same_decimal(a, b)
    if isinstance(a, Mapping) and isinstance(b, Mapping):
        if a.keys() != b.keys():
            return False
        if a.keys() == {canon.FLOAT_TAG}:
            x, y = a[canon.FLOAT_TAG], b[canon.FLOAT_TAG]
            return bool(abs(x - y) <= max(tagged, abs(x) // canon.NANO))
        return all(_close(a[k], b[k], slack, tagged=tagged) for k in a)
    if isinstance(a, list | tuple) and isinstance(b, list | tuple):
        return len(a) == len(b) and all(_close(x, y, slack, tagged=tagged) for x, y in zip(a, b, strict=True))
    return False


def _same_decimal(a: str, b: str) -> bool:
    if _DECIMAL.fullmatch(a) is None or _DECIMAL.fullmatch(b) is None:
        return False
    return abs(float(a) - float(b)) <= 2.000001e-6
