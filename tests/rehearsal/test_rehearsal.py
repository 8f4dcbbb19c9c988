"""A rehearsal says what looks would have said, and keeps nothing."""

from __future__ import annotations

from dataclasses import replace

import pytest
from rehearsal.history import COLUMNS, DAY, START, rows, source, watched

from watcher.errors import UsageError
from watcher.ledger.store import Ledger
from watcher.look import look
from watcher.rehearsal import Pulled, moments, rehearse
from watcher.sources.injected import InjectedSource, Injection
from watcher.sources.memory import MemorySource


def test_it_says_what_real_looks_would_have_said() -> None:
    """The same looks into a ledger of their own: equal events with equal times, equal standings, equal histories."""
    times = moments(START, START + 20 * DAY, 4 * DAY)
    ticks: list[int] = []
    found = rehearse([Pulled(source(), tuple(watched()))], times, lambda: ticks.append(1))
    said = []
    with Ledger.memory() as ledger:
        for now in times:
            outcome = look(ledger, source(), watched(), now, at_given=True)
            said += [(outcome.at, event) for event in outcome.events]
        history = ledger.history("triage", "1")

    assert [(each.at, each.event) for each in found.said] == said
    assert found.standings == outcome.standings
    assert [row.standing for row in found.histories["triage", "1"]] == [
        standing for _, _, standing in reversed(history)
    ]
    assert found.looks == len(times) == len(ticks) == 5
    assert found.rejected == {}


def test_without_labelled_at_it_says_that_later_labels_are_seen() -> None:
    """One remark for the whole rehearsal, not one a look."""
    columns = [name for name in COLUMNS if name != "labelled_at"]
    bare = MemorySource("desk", columns, rows(days=6))
    unmapped = [
        replace(w, terms=replace(w.terms, columns=replace(w.terms.columns, labelled_at=None))) for w in watched()
    ]
    found = rehearse([Pulled(bare, tuple(unmapped))], moments(START, START + 6 * DAY, 2 * DAY))

    assert len([remark for remark in found.remarks if "labelled_at" in remark]) == 1


@pytest.mark.parametrize(
    ("since", "until", "step", "expected"),
    [(0, 10, 5, [5, 10]), (0, 12, 5, [5, 10, 12]), (0, 3, 5, [3])],
)
def test_the_last_look_is_at_the_end(since: int, until: int, step: int, expected: list[int]) -> None:
    """Whatever the step is, `until` is looked at."""
    assert list(moments(since, until, step)) == expected


@pytest.mark.parametrize(("since", "until", "step"), [(5, 5, 1), (6, 5, 1), (0, 10, 0), (0, 10_000_000, 1)])
def test_times_that_make_no_sense_are_refused(since: int, until: int, step: int) -> None:
    """Nothing between, a step of nothing, more looks than anybody waits for."""
    with pytest.raises(UsageError):
        moments(since, until, step)


def test_injected_drift_is_noticed_and_without_it_nothing_is() -> None:
    """Rate 0.02 against 0.03 says no breach; 8 times from day 8 on breaks the promise after that day."""
    times = moments(START, START + 24 * DAY, 8 * DAY)
    drift = InjectedSource(source(), Injection(START + 8 * DAY, factor=8), times[-1])
    calm = rehearse([Pulled(source(), tuple(watched()))], times)
    found = rehearse([Pulled(drift, tuple(watched()))], times)
    breaches = [said for said in found.said if said.event.kind == "breach"]

    assert [said for said in calm.said if said.event.kind == "breach"] == []
    assert breaches
    assert all(said.event.bucket is not None and said.event.bucket >= START + 8 * DAY for said in breaches)
    assert found.standings[0].labels == calm.standings[0].labels
    assert found.standings[0].errors > calm.standings[0].errors
