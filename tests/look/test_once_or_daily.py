"""One look over a year says what daily looks say, to the last digit."""

from __future__ import annotations

import time
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import pytest
from look.rows import RELEASED, configuration, write, year

from watcher import assembly, settings
from watcher.ledger.audit import audit
from watcher.ledger.store import Ledger
from watcher.look import Outcome, attempt
from watcher.records import Event, Standing
from watcher.replay import Replay

DAYS = 75


def _look(ledger: Ledger, path: Path, day: int) -> Outcome:
    config = settings.read(path)
    table = config.source[0]
    now = int((RELEASED + timedelta(days=day)).timestamp())
    source = assembly.source_of(config, table)
    return attempt(ledger, source, assembly.watched(config, table.name), now, time.monotonic, at_given=True)


def _evidence_events(events: list[Event]) -> list[tuple[str, str, int | None, tuple[tuple[str, object], ...]]]:
    kinds = ("breach", "warning", "warning-over", "supported", "support-lost")
    return [(e.kind, e.value, e.bucket, tuple(sorted(e.facts.items()))) for e in events if e.kind in kinds]


def _timeless(standing: Standing) -> Standing:
    """Without when a breach was noticed, which is the one thing that looks decide."""
    if standing.breach is None:
        return standing
    return replace(standing, breach=replace(standing.breach, noticed=RELEASED))


@pytest.mark.parametrize(("labelled_at", "seed"), [(True, 3), (False, 4)])
def test_one_look_equals_daily_looks(tmp_path: Path, labelled_at: bool, seed: int) -> None:
    """With labelled_at: late labels and corrections in the rows; without it: rows that do not change after sealing."""
    rows = year(seed, DAYS, 60, late=labelled_at, jump=25)
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(labelled_at=labelled_at), encoding="utf-8")
    write(tmp_path / "rows.csv", rows)
    once, daily = Ledger.memory(), Ledger.memory()
    events: list[Event] = []
    for day in range(1, DAYS + 9):
        last = _look(daily, path, day)
        events += last.events
    only = _look(once, path, DAYS + 8)

    assert [_timeless(s) for s in only.standings] == [_timeless(s) for s in last.standings]
    assert _evidence_events(list(only.events)) == _evidence_events(events)
    assert any(s.breach for s in only.standings), "the rows are made so that site b breaks the promise"
    assert {s.value for s in only.standings} == {"", "a", "b", "c"}, "c is not declared and was discovered"
    for ledger in (once, daily):
        found = audit(ledger, replay=Replay())
        assert found.findings == ()
        assert found.rederived == found.looks > 0
