"""One look: what is written, what is refused, what is announced."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from look.rows import RELEASED, configuration, write, year

from watcher import assembly, settings
from watcher.errors import LedgerBusy, TermsChanged, UsageError
from watcher.ledger.audit import audit
from watcher.ledger.store import Ledger
from watcher.look import (
    ClockWentBack,
    Outcome,
    Routing,
    Watched,
    acknowledge,
    attempt,
    draft_notices,
    look,
    quiet_until,
)
from watcher.records import EVENTS, Event, Remarks, TermDraft
from watcher.replay import Replay
from watcher.sources.base import Source

BOARD = Routing("desk", frozenset(EVENTS))
RETRAIN = Routing("retraining", frozenset({"breach"}), retrain=True)


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    """A configuration whose site b breaks the promise after day 10."""
    write(tmp_path / "rows.csv", year(21, 40, 120, late=False, jump=10, rate=0.03))
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    return path


def _parts(path: Path) -> tuple[Source, list[Watched]]:
    config = settings.read(path)
    return assembly.source_of(config, config.source[0]), assembly.watched(config, "desk")


def _at(day: float) -> int:
    return int((RELEASED + timedelta(days=day)).timestamp())


def _look(ledger: Ledger, path: Path, day: float, *routes: Routing) -> Outcome:
    return attempt(ledger, *_parts(path), _at(day), lambda: 0.0, at_given=True, routes=routes)


def test_a_breach_starts_retraining_once_however_many_slices_join(desk: Path) -> None:
    """One retraining notice a breach number; the other route hears of every event."""
    ledger = Ledger.memory()
    for day in range(5, 46, 4):
        _look(ledger, desk, day, BOARD, RETRAIN)
    breaches = ledger.events(kinds=("breach",))

    assert {event.event.facts["number"] for event in breaches} == {1}
    assert len(ledger.notices(route="retraining")) == 1
    assert len([n for n in ledger.notices(route="desk", limit=1000) if n.kind == "breach"]) == len(breaches)


def test_the_first_look_sends_one_notice_a_route(desk: Path) -> None:
    """It records every event with its bucket and tells the gravest."""
    ledger = Ledger.memory()
    outcome = _look(ledger, desk, 46, BOARD)

    assert len(outcome.events) > 3
    assert [notice.kind for notice in ledger.notices(route="desk")] == ["breach"]


def _draft(**changes: object) -> TermDraft:
    empty = TermDraft("p", "1", None, (), (), (), (), 0, Remarks(), (), ())
    return replace(empty, **changes)  # type: ignore[arg-type]


@pytest.mark.parametrize(("sealed", "expected"), [(7, 3), (8, 1)])
def test_a_look_over_a_long_gap_sends_one_notice(sealed: int, expected: int) -> None:
    """More than a week of buckets at once is a gap."""
    events = [Event(kind, "p", "1", "", "", None) for kind in ("warning", "support-lost", "supported")]
    found = draft_notices(events, [_draft(sealed=tuple(range(sealed)))], [BOARD])

    assert len(found) == expected
    assert events[found[-1].event].kind == ("supported" if expected == 3 else "support-lost")


def test_a_route_hears_only_of_its_promises() -> None:
    """`promises` on a route."""
    events = [Event("warning", name, "1", "", "", None) for name in ("p", "q")]

    assert [n.event for n in draft_notices(events, [], [replace(BOARD, promises=frozenset({"q"}))])] == [1]


def test_the_clock_that_went_back_makes_no_look(desk: Path) -> None:
    """Nothing is written, both times are named."""
    ledger = Ledger.memory()
    _look(ledger, desk, 20)
    before = ledger.head()
    with pytest.raises(ClockWentBack, match="clock-went-back"):
        _look(ledger, desk, 19)

    assert ledger.head() == before


def test_terms_are_frozen_at_the_first_look(desk: Path) -> None:
    """A later difference names the key and both values; nothing is written."""
    ledger = Ledger.memory()
    _look(ledger, desk, 20)
    source, watched = _parts(desk)
    other = [replace(watched[0], terms=replace(watched[0].terms, label_lag=86400))]
    with pytest.raises(TermsChanged) as caught:
        look(ledger, source, other, _at(21), at_given=True)

    assert (caught.value.key, caught.value.frozen, caught.value.wanted) == ("label_lag", "432000", "86400")


def test_a_ledger_that_moved_on_throws_the_pull_away(desk: Path) -> None:
    """Another look of the same source was committed between the pull and the commit."""
    ledger = Ledger.memory()
    source, watched = _parts(desk)

    class Slow:
        name = source.name

        def __getattr__(self, name: str) -> object:
            return getattr(source, name)

        def tally(self, questions: object) -> object:
            counted = source.tally(questions)  # type: ignore[arg-type]
            look(ledger, source, watched, _at(20), at_given=True)
            return counted

    with pytest.raises(LedgerBusy):
        look(ledger, Slow(), watched, _at(20), at_given=True)  # type: ignore[arg-type]
    assert ledger.head().look == 1


def test_nothing_new_is_expected_before_the_next_sealing(desk: Path) -> None:
    """Unchanged files need no pull until a bucket is due or a promise grows stale."""
    ledger = Ledger.memory()
    _look(ledger, desk, 20.5)
    _, watched = _parts(desk)

    # Day 15 ends at 16 days, its labels may come for 5 more.
    assert quiet_until(ledger, "desk", watched, has_future=False) == _at(21)
    assert quiet_until(ledger, "desk", watched, has_future=True) == 0


def test_an_acknowledgement_is_recorded_and_changes_no_state(desk: Path) -> None:
    """Who, why and which breach; the chain goes on; an unknown breach is refused."""
    ledger = Ledger.memory()
    _look(ledger, desk, 46)
    acknowledge(ledger, "triage", "1", 1, "Ada", "known camera fault, retraining ordered", _at(46.5))
    newest = ledger.events(limit=1)[0].event

    assert (newest.kind, newest.facts["who"], newest.facts["number"]) == ("acknowledged", "Ada", 1)
    assert any(standing.state == "breached" for standing in ledger.standings())
    assert audit(ledger, replay=Replay()).findings == ()
    with pytest.raises(UsageError, match="breach 2 does not stand"):
        acknowledge(ledger, "triage", "1", 2, "Ada", "x", _at(47))
    with pytest.raises(UsageError, match="who"):
        acknowledge(ledger, "triage", "1", 1, " ", "x", _at(47))


def test_a_failing_source_is_announced_once_and_restored_once(desk: Path) -> None:
    """The counts stay; the second failure says nothing new."""
    ledger, rows = Ledger.memory(), desk.with_name("rows.csv")
    _look(ledger, desk, 20, BOARD)
    text = rows.read_bytes()
    rows.unlink()
    first, second = _look(ledger, desk, 21, BOARD), _look(ledger, desk, 22, BOARD)
    rows.write_bytes(text)
    third = _look(ledger, desk, 23, BOARD)

    assert [event.kind for event in first.events] == ["source-failed"]
    assert second.events == ()
    assert "source-restored" in [event.kind for event in third.events]
    assert first.failed[0].since == datetime(2026, 1, 26, tzinfo=UTC)
    assert second.failed[0].since == first.failed[0].since
    assert ledger.source_state("desk").failures_total == 2
    assert audit(ledger, replay=Replay()).findings == ()


def test_counts_that_shrink_before_sealing_are_told(desk: Path) -> None:
    """Rows that vanish from an open bucket are an event with both counts."""
    ledger, rows = Ledger.memory(), desk.with_name("rows.csv")
    _look(ledger, desk, 10)
    lines = rows.read_text(encoding="utf-8").splitlines(keepends=True)
    rows.write_text("".join(line for line in lines if ",2026-01-12T" not in line), encoding="utf-8")
    kinds = [event.kind for event in _look(ledger, desk, 10.5).events]

    assert "evidence-shrank" in kinds
