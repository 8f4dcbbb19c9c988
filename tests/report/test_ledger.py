from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from report.world import cells_of, draw_counts, moment, standings_of
from wording.invented import DAY, HOSTILE, with_depots

from watcher.ledger.store import Ledger
from watcher.ledger.terms import terms_digest
from watcher.records import Entry, Event, Remarks, StoredTerm, TermDraft
from watcher.report.files import contents
from watcher.report.page import as_html
from watcher.report.snapshot import Snapshot, snapshot
from watcher.report.week import Week
from watcher.report.weekly import published, weekly

DEPOTS = ("Alder", HOSTILE, "Cedar")
TERMS = with_depots(*DEPOTS)
LOOKS = (14, 21, 28, 35, 42)
"""Days since the release on which the invented promise is looked at; label lag 10 days."""


def draft(day: int, before: int) -> TermDraft:
    """What the look of a day adds to that of day `before` (0: none)."""
    counts, cells = draw_counts(TERMS, LOOKS[-1], 11), cells_of(TERMS)
    ordered = sorted(cells, key=lambda cell: cell.key)
    sealed, known = day - 10, max(0, before - 10)
    starts = tuple(TERMS.released + i * DAY for i in range(known, sealed))
    return TermDraft(
        promise=TERMS.promise,
        version=TERMS.version,
        new_terms=None if before else TERMS,
        new_cells=() if before else cells,
        counts=tuple(row for row in counts if before * DAY <= row.bucket - TERMS.released < day * DAY),
        gone=(),
        sealed=starts,
        sealed_until=TERMS.released + sealed * DAY,
        remarks=Remarks(),
        standings=tuple(
            replace(standings_of(TERMS, cell, counts, sealed)[-1], terms=terms_digest(TERMS)) for cell in ordered
        ),
        memories=({},) * len(cells),
    )


def fill(ledger: Ledger) -> Ledger:
    """Five looks, the first one with the event of the release."""
    before = 0
    for day in LOOKS:
        events = (Event("released", TERMS.promise, TERMS.version, "", "", None, {}),) if not before else ()
        expected, _ = ledger.newest_look(TERMS.source)
        at = TERMS.released + day * DAY
        ledger.commit(Entry(TERMS.source, at, "pull", 1, expected, (draft(day, before),), events))
        before = day
    return ledger


@pytest.fixture(scope="module")
def found() -> Snapshot:
    with fill(Ledger.memory(new_id="invented")) as ledger:
        return snapshot(ledger, units={TERMS.promise: "parcel"})


def test_a_snapshot_holds_what_the_ledger_holds(found: Snapshot) -> None:
    """Terms, cells, counts, standings, a day's standing for every look, events, look number and the time of the look."""
    promise = found.promises[0]

    assert found.head.look == len(LOOKS)
    assert found.at == moment(TERMS.released + LOOKS[-1] * DAY)
    assert promise.terms == TERMS
    assert promise.unit == "parcel"
    assert promise.sealed_until == TERMS.released + 32 * DAY
    assert promise.counts == draw_counts(TERMS, LOOKS[-1], 11)
    assert [cell.key for cell in promise.cells] == [cell.key for cell in cells_of(TERMS)]
    assert {key: len(rows) for key, rows in promise.history.items()} == {cell.key: 5 for cell in promise.cells}
    assert [row.look for row in promise.history["", ""]] == [1, 2, 3, 4, 5]
    assert [stored.event.kind for stored in promise.events] == ["released"]


def test_a_report_of_a_ledger(found: Snapshot) -> None:
    """42 days after a release on a Monday with a lag of 10 days, 32 are sealed: W48 is final, W49 and W50 are not."""
    report = weekly(found)

    assert [(f.week.name, f.final) for f in report.promises[0].whole.shown] == [
        ("2026-W48", True),
        ("2026-W49", False),
        ("2026-W50", False),
    ]
    assert "<script" not in as_html(report, lambda spec, prefix: "<svg/>")


def test_the_same_file_gives_the_same_bytes(tmp_path: Path) -> None:
    """A ledger that is closed and opened again gives the same report, to the byte."""
    url = f"sqlite:///{tmp_path / 'watcher.db'}"
    fill(Ledger.open(url, new_id="invented")).close()
    made = []
    for _ in range(2):
        with Ledger.open(url, write=False) as ledger:
            made.append(contents(weekly(snapshot(ledger)), ("html", "csv", "json"), lambda spec, prefix: repr(spec)))

    assert made[0] == made[1]


def test_a_correction_shows_as_a_revision(found: Snapshot) -> None:
    """A week that a report gave, and whose counts a later look changed, is shown with both figures."""
    with fill(Ledger.memory(new_id="invented")) as ledger:
        said = published(weekly(snapshot(ledger), Week.parse("2026-W50")))
        last = draft(49, 42)
        row = next(r for r in found.promises[0].counts if r.bucket == TERMS.released + 40 * DAY and not r.column)
        changed = replace(row, counts=replace(row.counts, labels=row.counts.labels + 2))
        last = replace(last, counts=(*last.counts, changed))
        expected, _ = ledger.newest_look(TERMS.source)
        ledger.commit(Entry(TERMS.source, TERMS.released + 49 * DAY, "pull", 1, expected, (last,), ()))
        whole = weekly(snapshot(ledger, published=said)).promises[0].whole

    assert [(f.week.name, f.labels - f.was.labels) for f in whole.revised if f.was] == [("2026-W50", 2)]


def test_a_look_meanwhile_is_read_again() -> None:
    """When another process records a look while a snapshot is read, everything is read once more."""
    with fill(Ledger.memory(new_id="invented")) as ledger:
        moved = _Moving(ledger)
        got = snapshot(moved)

    assert moved.rounds == 2
    assert got.head.look == len(LOOKS)


def test_only_the_promises_asked_for(found: Snapshot) -> None:
    """Other names give an empty snapshot."""
    with fill(Ledger.memory(new_id="invented")) as ledger:
        assert snapshot(ledger, promises=["other"]).promises == ()
        assert len(snapshot(ledger, promises=[TERMS.promise]).promises) == len(found.promises)


def test_the_manual_works_as_written(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The Python of docs/report.md, with a week of this ledger, writes the four files."""
    manual = (Path(__file__).parents[2] / "docs" / "report.md").read_text(encoding="utf-8")
    code = manual.partition("```python\n")[2].partition("```")[0]
    assert "2026-W26" in code
    monkeypatch.chdir(tmp_path)
    fill(Ledger.open("sqlite:///watcher.db", new_id="invented")).close()

    exec(code.replace("2026-W26", "2026-W48"), {})
    assert {path.name for path in (tmp_path / "reports").iterdir()} == {
        f"2026-W48.{each}" for each in ("html", "csv", "json", "pdf")
    }


class _Moving:
    """A ledger whose head moves on while it is read for the first time."""

    def __init__(self, ledger: Ledger) -> None:
        self._ledger, self._heads, self.rounds = ledger, 0, 0

    def head(self) -> Any:
        self._heads += 1
        head = self._ledger.head()
        return replace(head, look=head.look - 1) if self._heads == 1 else head

    def terms(self, *, source: str | None = None, open_only: bool = True) -> list[StoredTerm]:
        self.rounds += 1
        return self._ledger.terms(source=source, open_only=open_only)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._ledger, name)
