"""How near a verdict derived again must be: counts, times and states exactly, computed figures within their rounding."""

from __future__ import annotations

from typing import Any

import pytest

from watcher.ledger.compare import body_differences, event_differences, memory_differences
from watcher.records import Event

BODY: dict[str, Any] = {
    "state": "breached",
    "flags": ["stale"],
    "predictions": 100,
    "labels": 90,
    "errors": 9,
    "provisional": [5, 4, 1],
    "late": 0,
    "estimate": 100_000_000,
    "life": [50_000_000, 150_000_000],
    "recent": [1_793_577_600, 80, 8, 40_000_000, 160_000_000],
    "support": [1_793_577_600, 1_793_664_000, 29_000_000],
    "breach": [1, 1_793_664_000, 1_793_667_600, 1_793_577_600, 31_000_000],
    "decide": [4473, None],
    "total": 6_907_756,
    "threshold": 6_907_755_279,
    "newest": 1_793_660_000,
    "until": 1_793_664_000,
    "diagnostics": {"share": {"1e-9": 900_000_000}, "z": None},
}
ALLOWED = {
    ("estimate",): 2,
    ("life", 0): 2,
    ("life", 1): 2,
    ("recent", 3): 2,
    ("recent", 4): 2,
    ("support", 2): 2,
    ("breach", 4): 2,
    ("decide", 0): 1,
    ("total",): 2,
    ("threshold",): 2,
}
"""From contracts.md (totals 2e-6 nats) and the brief of the ledger (rates 2e-9); everything else 0."""


def places(body: dict[str, Any]) -> list[tuple[Any, ...]]:
    found: list[tuple[Any, ...]] = []
    for key, value in body.items():
        if isinstance(value, int):
            found.append((key,))
        elif isinstance(value, list):
            found += [(key, i) for i, inner in enumerate(value) if isinstance(inner, int)]
    return found


def moved(place: tuple[Any, ...], by: int) -> dict[str, Any]:
    body = {k: list(v) if isinstance(v, list) else v for k, v in BODY.items()}
    if len(place) == 1:
        body[place[0]] += by
    else:
        body[place[0]][place[1]] += by
    return body


@pytest.mark.parametrize("place", places(BODY))
def test_every_figure_has_its_slack_and_no_more(place: tuple[Any, ...]) -> None:
    """Moved by its slack a figure is accepted, moved by one more it is not, up or down."""
    slack = ALLOWED.get(place, 0)

    for sign in (1, -1):
        assert body_differences(BODY, moved(place, sign * slack)) == []
        assert body_differences(BODY, moved(place, sign * (slack + 1))) == [place[0]]


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("state", "supported"),
        ("flags", []),
        ("recent", None),
        ("breach", [1, 2]),
        ("decide", [4473, 1]),
        ("errors", "9.500000000"),
        ("diagnostics", {"share": {"1e-9": 900_000_003}, "z": None}),
        ("diagnostics", {"share": {"1e-9": 900_000_000}}),
        ("labels", True),
    ],
)
def test_anything_else_that_differs_is_named(key: str, value: Any) -> None:
    """Another state, flag, shape or diagnostic is a difference in both directions."""
    other = {**BODY, key: value}

    assert body_differences(BODY, other) == [key]
    assert body_differences(other, BODY) == [key]
    assert body_differences(BODY, {k: v for k, v in BODY.items() if k != key}) == [key]


def test_memories_are_compared_exactly_but_for_computed_figures() -> None:
    """Keys that end in _micronats may differ by 2 and decimal text by 2e-6, also inside nested mappings; nothing else."""
    memory = {
        "number": 1,
        "top_micronats": 500,
        "inner": {"low_micronats": 7, "open": True},
        "path": [1, 2],
        "none": None,
    }

    assert memory_differences(memory, {**memory, "top_micronats": 502}) == []
    assert memory_differences(memory, {**memory, "inner": {"low_micronats": 5, "open": True}}) == []
    for other in (
        {"number": 2},
        {"top_micronats": 503},
        {"inner": {"low_micronats": 4, "open": True}},
        {"inner": {"low_micronats": 7, "open": 1}},
        {"path": [1, 3]},
        {"path": [1]},
        {"none": 0},
        {"new": None},
    ):
        assert memory_differences(memory, {**memory, **other}) == list(other)


def test_events_are_compared_in_order_with_decimal_text_by_value() -> None:
    """Kinds, names and buckets exactly; figures in facts within 2e-6; a missing or further event is told."""
    one = Event(
        "breach", "p", "1", "", "", 5, {"total": "6.907756", "lower": 0.0312, "number": 1, "since": "2026-11-02"}
    )
    near = Event(
        "breach", "p", "1", "", "", 5, {"total": "6.907758", "lower": 0.031201, "number": 1, "since": "2026-11-02"}
    )
    others = [
        Event("breach", "p", "1", "", "", 6, one.facts),
        Event("warning", "p", "1", "", "", 5, one.facts),
        Event("breach", "p", "1", "", "", 5, {**one.facts, "total": "6.907759"}),
        Event("breach", "p", "1", "", "", 5, {**one.facts, "lower": 0.0313}),
        Event("breach", "p", "1", "", "", 5, {**one.facts, "number": 2}),
        Event("breach", "p", "1", "", "", 5, {**one.facts, "since": "2026-11-03"}),
    ]

    assert list(event_differences([one], [near])) == []
    assert [len(list(event_differences([one], [other]))) for other in others] == [1] * len(others)
    assert "was recorded and is not derived again" in next(event_differences([one], []))
    assert "is derived and was not recorded" in next(event_differences([], [one]))
