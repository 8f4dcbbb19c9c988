"""Charts with the words and the table that stand behind each."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

from markupsafe import Markup

from watcher import wording
from watcher.ledger.store import Ledger
from watcher.records import Standing, StoredTerm
from watcher.report import charts
from watcher.report.snapshot import DayStanding
from watcher.web import reading
from watcher.web.charts import Gallery
from watcher.web.places import promise_path, slice_id
from watcher.web.reading import Key

SMALL: Final = 12
"""Slices that are drawn as small multiples."""
_ROWS: Final = 30
"""Newest days that the table behind a chart shows; the rest is in the CSV."""


@dataclass(frozen=True, slots=True)
class Figure:
    """A chart with the words and the table that stand for it."""

    id: str
    title: str
    caption: str
    picture: Markup | None
    spec: str
    """Address of its spec."""
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    csv: str


def figures(
    gallery: Gallery, ledger: Ledger, stored: StoredTerm, key: Key, rows: tuple[DayStanding, ...]
) -> list[Figure]:
    """The charts of a promise or a slice: limits, total, labels."""
    return [
        bounds(gallery, stored, key, rows),
        _total(gallery, stored, key, rows),
        _labels(gallery, ledger, stored, key, rows),
    ]


def bounds(gallery: Gallery, stored: StoredTerm, key: Key, rows: tuple[DayStanding, ...]) -> Figure:
    """The limits since the release against the tolerance."""

    def line(row: DayStanding) -> tuple[str, ...]:
        s = row.standing
        lower, upper = wording.limits(s.life.lower, s.life.upper)
        recent = "–" if s.recent is None or not s.recent.labels else wording.percent(s.recent.errors / s.recent.labels)
        rate = "–" if s.estimate is None else wording.percent(s.estimate)
        return _until(row, stored), f"{s.labels:,}", rate, lower, upper, recent

    return _figure(
        gallery, stored, key, rows, "bounds", "Limits against the tolerance",
        "The line is the average error since the release, the band its limits, which hold at all times at once; "
        "the dotted line is the average of the last 28 days; dashed: what was promised.",
        ("counted up to", "labels", "since release", "lower limit", "upper limit", "last 28 days"),
        line, lambda: charts.bounds(rows, stored.terms),
    )  # fmt: skip


def _total(gallery: Gallery, stored: StoredTerm, key: Key, rows: tuple[DayStanding, ...]) -> Figure:
    def line(row: DayStanding) -> tuple[str, ...]:
        s = row.standing
        return _until(row, stored), f"{s.labels:,}", wording.nats(s.total), wording.nats(s.threshold)

    return _figure(
        gallery, stored, key, rows, "total", "Evidence against the promise",
        "The total of all windows, in nats: the natural logarithm of what betting against the promise would have made of one coin; "
        "the promise is broken when it reaches the dashed threshold.",
        ("counted up to", "labels", "total", "threshold"), line, lambda: charts.total(rows, stored.terms),
    )  # fmt: skip


def _labels(gallery: Gallery, ledger: Ledger, stored: StoredTerm, key: Key, rows: tuple[DayStanding, ...]) -> Figure:
    days = reading.day_counts(ledger, stored, key, rows)
    base = _base(stored, key)
    looked = rows[-1].look if rows else 0
    picture = gallery.picture(("labels", stored.id, key, looked), "labels", lambda: charts.labels(days))
    table = tuple(
        (
            d.day.isoformat(),
            f"{d.predictions:,}",
            f"{d.labels:,}",
            f"{d.late:,}",
            "counted" if d.sealed else "may still come",
        )
        for d in reversed(days[-_ROWS:])
    )
    return Figure(
        "labels", "Labels a day",
        "What was predicted and what of it was labelled, by day of prediction. Days whose labels may still come are paler.",
        picture, f"{base[0]}/charts/labels{base[1]}",
        ("day", "predicted", "labelled", "late", "state"), table, f"{base[0]}/counts{base[1]}{_and(base[1])}format=csv",
    )  # fmt: skip


def _figure(
    gallery: Gallery,
    stored: StoredTerm,
    key: tuple[str, str],
    rows: tuple[DayStanding, ...],
    kind: str,
    title: str,
    caption: str,
    head: tuple[str, ...],
    line: Callable[[DayStanding], tuple[str, ...]],
    spec: Callable[[], charts.Spec],
) -> Figure:
    base = _base(stored, key)
    looked = rows[-1].look if rows else 0
    picture = gallery.picture((kind, stored.id, key, looked), kind, spec)
    table = tuple(line(row) for row in reversed(charts.thinned(rows)[-_ROWS:]))
    csv = f"{base[0]}/history{base[1]}{_and(base[1])}format=csv"
    return Figure(kind, title, caption, picture, f"{base[0]}/charts/{kind}{base[1]}", head, table, csv)


def multiples(gallery: Gallery, ledger: Ledger, stored: StoredTerm, slices: Sequence[Standing]) -> Markup | None:
    """The slices as small multiples, in the order given."""
    key = ("slices", stored.id, tuple((s.column, s.value, s.labels, s.total, s.state) for s in slices[:SMALL]))

    def spec() -> charts.Spec:
        cells = [reading.history(ledger, stored.terms, (s.column, s.value)) for s in slices[:SMALL]]
        return charts.slices(cells, stored.terms, most=SMALL)

    return gallery.picture(key, "slices", spec)


def _base(stored: StoredTerm, key: tuple[str, str]) -> tuple[str, str]:
    api = "/api/v1" + promise_path(stored.terms.promise, stored.terms.version)
    return (api, f"?slice={slice_id(*key)}") if key[0] else (api, "")


def _and(query: str) -> str:
    return "&" if query else "?"


def _until(row: DayStanding, stored: StoredTerm) -> str:
    until = row.standing.counted_until
    return "–" if until is None else wording.last(until, stored.terms.time_zone)
