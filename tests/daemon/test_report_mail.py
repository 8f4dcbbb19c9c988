"""Which files a mail about the weekly report carries."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta

from watcher.daemon.posting import _report
from watcher.ledger.store import Ledger
from watcher.records import Notice

MADE = datetime(2026, 12, 1, 6, tzinfo=UTC)


def _notice(created: datetime) -> Notice:
    return Notice("k", "mail", "report", "p", "1", 1, None, "waiting", 0, created, created, None, None)


def test_page_and_figures_of_the_newest_report_by_then() -> None:
    """Not the PDF, not a report that was made after the notice, nothing before the first report."""
    ledger = Ledger.memory()
    assert _report(ledger, _notice(MADE)) == ()
    for week, text, later in (("2026-W47", "old", 0), ("2026-W48", "new", 1)):
        files = [(f"{week}.html", text.encode()), (f"{week}.csv", b"a,b"), (f"{week}.pdf", b"%PDF-1.7 \xff")]
        ledger.reports.add(week, files, head=ledger.head(), created=MADE + timedelta(days=7 * later), final=True)

    first = _report(ledger, _notice(MADE))
    second = _report(ledger, _notice(MADE + timedelta(days=7)))
    assert [(a.name, a.text) for a in first] == [("2026-W47.csv", "a,b"), ("2026-W47.html", "old")]
    assert [(a.name, a.text) for a in second] == [("2026-W48.csv", "a,b"), ("2026-W48.html", "new")]
