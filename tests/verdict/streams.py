"""Labels of one promise as looks see them, without files: counts by bucket at each look, fed to the verdict as a look does."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

from watcher.book import build, first_cells, sealing, table
from watcher.records import CellCounts, Columns, Counts, Event, Remarks, Standing, Terms
from watcher.verdict import advance

DAY = 86400
RELEASED = 1767571200
"""2026-01-05T00:00:00Z, a Monday."""
TERMS = Terms(
    promise="p",
    model="",
    version="1",
    source="s",
    where=(),
    columns=Columns("t", "p", label="l"),
    time_format="rfc3339",
    source_time_zone=None,
    classes=(),
    positive=None,
    measure="error",
    tolerance=0.03,
    risk=0.001,
    released=RELEASED,
    service_life=364 * DAY,
    bucket=DAY,
    time_zone="UTC",
    label_lag=10 * DAY,
    count="sealed",
    slices=(),
    weight_levels=(),
    n_max=None,
    cluster_span=None,
    labelling_probabilities=(),
    label_noise=None,
    window_at_least=None,
    support_at_least=7 * DAY,
    warn_every=1095 * DAY,
)
Seen = dict[int, tuple[int, int]]
"""Day -> labels and errors as a look sees them."""


def terms(**changes: Any) -> Terms:
    """The terms with changes."""
    return replace(TERMS, **changes)


def run(about: Terms, looks: Sequence[tuple[int, Seen]]) -> tuple[Standing, list[Event]]:
    """Look after look at (time in days since the release, counts seen); a sealed bucket keeps what its sealing saw."""
    cells, memories = first_cells(about), {}
    stored: dict[int, CellCounts] = {}
    until, events, standing = RELEASED, [], None
    for day, seen in looks:
        now = RELEASED + int(day * DAY)
        rows = dict(stored)
        for bucket, (n, k) in seen.items():
            start = RELEASED + bucket * DAY
            if start >= until:
                rows[start] = CellCounts("", "", start, "", Counts(n, n, k, newest=start + DAY - 1))
        before = until
        _, until = sealing(about, before, now)
        book = build(about, "d", cells, table(rows.values()), before, until, memories, table(stored.values()))
        verdict = advance(book, now, Remarks())
        memories = {("", ""): verdict.memories[0]}
        stored, standing = rows, verdict.standings[0]
        events += verdict.events
    assert standing is not None
    return standing, events


def kinds(events: Sequence[Event]) -> list[str]:
    """What happened, in order."""
    return [event.kind for event in events]
