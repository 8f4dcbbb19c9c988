"""One entry, one transaction: what is written, what is refused, what is read back."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from datetime import date, timedelta
from fractions import Fraction
from typing import Any

import numpy as np
import pytest
from ledger.world import DAY, METHOD, RELEASED, SimpleReplay, World, declared_cells, make_terms, moment

from watcher.errors import LedgerBusy, UsageError
from watcher.ledger import Ledger
from watcher.ledger.audit import audit
from watcher.ledger.keys import event_key, message_key, period_key, retraining_key
from watcher.records import (
    Cell,
    CellCounts,
    Counts,
    Entry,
    Event,
    Head,
    NoticeDraft,
    RejectedRow,
    Remarks,
    SourceState,
    TermDraft,
)


@pytest.fixture
def ledger() -> Iterator[Ledger]:
    with Ledger.memory(new_id="00ff") as made:
        yield made


def run(ledger: Ledger, world: World, days: range, hour: int = 1, source: str = "desk") -> Head:
    head = ledger.head()
    for day in days:
        number, _ = ledger.newest_look(source)
        head = ledger.commit(world.entry(RELEASED + day * DAY + hour * 3600, number, source=source))
    return head


def test_a_new_ledger_is_empty(ledger: Ledger) -> None:
    """Before the first look there is a head of number 0, and nothing else."""
    assert ledger.head().look == 0
    assert ledger.newest_look("desk") == (0, 0)
    assert ledger.newest_at() == 0
    assert (ledger.terms(), ledger.standings(), ledger.events(), ledger.notices()) == ([], [], [], [])
    assert ledger.history("damage-photos", "1") == []
    assert audit(ledger).ok


def test_equal_entries_in_ledgers_of_equal_id_give_equal_heads() -> None:
    """The chain depends on the ledger's id and its entries alone, not on the machine's clock or chance."""
    heads = []
    for ledger_id in ("00ff", "00ff", "00fe"):
        with Ledger.memory(new_id=ledger_id) as made:
            heads.append(run(made, World(5), range(1, 4)))

    assert heads[0] == heads[1] != heads[2]
    assert [h.look for h in heads] == [3, 3, 3]


def test_what_was_written_is_read_back(ledger: Ledger) -> None:
    """Terms, cells, counts, memories, standings and events come back as the entry gave them."""
    world = World(11, rate=0.08)
    entry = world.entry(RELEASED + 4 * DAY, 0)
    ledger.commit(entry)
    (term,) = ledger.terms(source="desk")
    draft = entry.terms[0]

    assert term.terms == draft.new_terms
    assert (term.first_look, term.closed_by, term.sealed_until) == (1, None, RELEASED + 2 * DAY)
    assert ledger.cells(term.id) == list(declared_cells(make_terms()))
    assert ledger.counts(term.id) == sorted(draft.counts, key=lambda c: (c.column, c.value, c.bucket))
    keys = [(s.column, s.value) for s in draft.standings]
    assert ledger.memories(term.id) == dict(zip(keys, draft.memories, strict=True))
    assert [s.state for s in ledger.standings()] == [s.state for s in draft.standings]
    assert [e.event.kind for e in ledger.events()] == ["breach"] * len(entry.events)
    assert ledger.newest_look("desk") == (1, RELEASED + 4 * DAY)
    assert ledger.newest_at() == RELEASED + 4 * DAY


def test_the_count_table_says_which_buckets_are_sealed(ledger: Ledger) -> None:
    """As columns: positions of cells, starts, integers, and the look that sealed each bucket."""
    run(ledger, World(11), range(1, 6))
    term = ledger.terms()[0]
    table = ledger.count_table(term.id)
    sealed = table.bucket < term.sealed_until

    assert len(table) == 3 * 6
    assert table.cells[0].key == ("", "")
    assert np.array_equal(table.sealed_by > 0, sealed)
    assert sorted(set(table.sealed_by[sealed].tolist())) == [3, 4, 5]
    assert table.column("labels").sum() == sum(c.counts.labels for c in ledger.counts(term.id))
    assert ledger.counts(term.id, since=term.sealed_until) == [
        c for c in ledger.counts(term.id) if c.bucket >= term.sealed_until
    ]
    assert len(ledger.count_table(99)) == 0


def test_a_look_that_began_before_another_is_refused(ledger: Ledger) -> None:
    """When the source moved on, nothing is written and the error says so."""
    world = World(1)
    first = world.entry(RELEASED + DAY, 0)
    head = ledger.commit(first)

    with pytest.raises(LedgerBusy, match="moved on: this look began after look 0, the newest is 1"):
        ledger.commit(replace(first, at=RELEASED + 2 * DAY))
    assert ledger.head() == head


def test_sources_do_not_disturb_one_another(ledger: Ledger) -> None:
    """A look of one source is committed although another source's look came in between."""
    world = World(1, promises=(make_terms(), make_terms("scans", source="yard")))
    ledger.commit(world.entry(RELEASED + DAY, 0))
    ledger.commit(world.entry(RELEASED + DAY, 0, source="yard"))
    ledger.commit(world.entry(RELEASED + 2 * DAY, 1))

    assert (ledger.newest_look("desk")[0], ledger.newest_look("yard")[0]) == (3, 2)
    assert audit(ledger, replay=SimpleReplay()).ok


def test_a_look_before_the_newest_one_is_refused(ledger: Ledger) -> None:
    """A clock that went back cannot enter the chain."""
    run(ledger, World(1), range(1, 3))

    with pytest.raises(UsageError, match="lies before the newest one"):
        ledger.commit(World(1).entry(RELEASED + DAY, 2))


def _draft(entry: Entry, **changes: Any) -> Entry:
    return replace(entry, terms=(replace(entry.terms[0], **changes),))


@pytest.mark.parametrize(
    ("spoil", "what"),
    [
        (lambda e: _draft(e, new_terms=None), "must give new_terms"),
        (lambda e: _draft(e, new_terms=make_terms("other")), "its terms speak of"),
        (lambda e: _draft(e, new_terms=make_terms(source="yard")), "belongs to source 'yard'"),
        (lambda e: _draft(e, new_cells=e.terms[0].new_cells[1:]), "must be among the cells"),
        (lambda e: _draft(e, new_cells=e.terms[0].new_cells[:1] * 2), "stands twice"),
        (lambda e: _draft(e, new_cells=e.terms[0].new_cells[:1]), "which is no cell"),
        (lambda e: _draft(e, standings=e.terms[0].standings[1:]), "3 memories"),
        (
            lambda e: _draft(e, standings=e.terms[0].standings[1:], memories=e.terms[0].memories[1:]),
            "exactly one standing for every cell",
        ),
        (
            lambda e: _draft(e, standings=tuple(replace(s, terms="00") for s in e.terms[0].standings)),
            "its terms and cell say",
        ),
        (
            lambda e: _draft(e, standings=tuple(replace(s, part=1.0) for s in e.terms[0].standings)),
            "its terms and cell say",
        ),
        (lambda e: _draft(e, gone=(("depot", "Elm", RELEASED, ""),)), "which is no cell"),
        (lambda e: replace(e, terms=e.terms * 2), "stands twice in the entry"),
        (lambda e: replace(e, notices=(NoticeDraft("log", 5),)), "event 5 is not among"),
    ],
)
def test_an_entry_that_does_not_fit_is_refused_whole(ledger: Ledger, spoil: Any, what: str) -> None:
    """A wrong entry is a ValueError that names what is wrong, and leaves the ledger as it was."""
    entry = World(2).entry(RELEASED + DAY, 0)
    before = ledger.head()

    with pytest.raises(ValueError, match=what):
        ledger.commit(spoil(entry))
    assert ledger.head() == before
    assert ledger.terms() == []
    assert audit(ledger).ok


def test_a_memory_with_a_float_is_refused(ledger: Ledger) -> None:
    """Floats may not enter the chain by the back door of a memory."""
    entry = World(2).entry(RELEASED + DAY, 0)

    with pytest.raises(TypeError, match="may not enter the chain"):
        ledger.commit(_draft(entry, memories=({"total": 0.5},) * 3))
    assert ledger.head().look == 0


def test_frozen_terms_cannot_be_given_again(ledger: Ledger) -> None:
    """Terms enter once; a second time is refused."""
    world = World(2)
    run(ledger, world, range(1, 2))
    entry = world.entry(RELEASED + 2 * DAY, 1)

    with pytest.raises(ValueError, match="has frozen terms already"):
        ledger.commit(_draft(entry, new_terms=make_terms()))


def test_a_superseded_promise_is_closed_and_takes_no_more_looks(ledger: Ledger) -> None:
    """The entry that closes a term is named in it; open_only leaves it out, and later entries are refused."""
    world = World(2)
    run(ledger, world, range(1, 3))
    entry = world.entry(RELEASED + 3 * DAY, 2)
    closing = world.judged(replace(_draft(entry, closed=True), kind="supersede"))
    head = ledger.commit(closing)

    assert ledger.terms() == []
    assert [t.closed_by for t in ledger.terms(open_only=False)] == [head.look]
    assert ledger.standings(open_only=True) == []
    assert len(ledger.standings()) == 3
    with pytest.raises(ValueError, match="was closed by look 3"):
        ledger.commit(world.entry(RELEASED + 4 * DAY, 3))
    assert audit(ledger, replay=SimpleReplay()).ok


def test_a_new_version_stands_beside_the_old_one(ledger: Ledger) -> None:
    """Two versions of a promise have terms, cells and standings of their own."""
    world = World(2, promises=(make_terms(), make_terms(version="2")))
    run(ledger, world, range(1, 3))

    assert [s.version for s in ledger.standings(promise="damage-photos")] == ["1"] * 3 + ["2"] * 3
    assert [s.value for s in ledger.standings(version="2")] == ["", "Alder", "Birch"]
    assert len(ledger.history("damage-photos", "2", "depot", "Birch")) == 2


def test_a_promise_that_is_no_longer_looked_at_keeps_its_rows_verifiable(ledger: Ledger) -> None:
    """Rows of a term that a later look of the same day leaves out are carried in the day's digest."""
    world = World(2, promises=(make_terms(), make_terms("scans")))
    run(ledger, world, range(1, 2), hour=1)
    world.promises = world.promises[:1]
    run(ledger, world, range(1, 3), hour=2)

    assert audit(ledger, replay=SimpleReplay()).ok


def test_cells_are_discovered_later_and_counts_can_go(ledger: Ledger) -> None:
    """A new slice value enters with its part; counts that vanished leave the cache; audit follows both."""
    world = World(2)
    run(ledger, world, range(1, 2))
    entry = world.entry(RELEASED + 2 * DAY, 1)
    ledger.commit(entry)
    new = Cell("depot", "Yew\x00\ud800\\u0041", Fraction(1, 20), 1)
    counts = CellCounts(new.column, new.value, RELEASED + 2 * DAY, "", Counts(3, 2, 1))
    draft = TermDraft(
        promise="damage-photos",
        version="1",
        new_terms=None,
        new_cells=(new,),
        counts=(counts,),
        gone=(("depot", "Alder", RELEASED + DAY, ""),),
        sealed=(),
        sealed_until=RELEASED,
        remarks=Remarks(),
        standings=(),
        memories=(),
    )
    ledger.commit(world.judged(Entry("desk", RELEASED + 3 * DAY, "pull", METHOD, 2, (draft,), ())))

    assert ledger.cells(1)[-1] == new
    assert counts in ledger.counts(1)
    assert ("Alder", RELEASED + DAY) not in [(c.value, c.bucket) for c in ledger.counts(1)]
    assert [s.value for s in ledger.standings()] == ["", "Alder", "Birch", new.value]
    assert audit(ledger, replay=SimpleReplay()).ok


def test_history_is_paged_from_the_newest_day(ledger: Ledger) -> None:
    """One standing a day, the last one; pages join without gap or overlap; since and until cut."""
    world = World(2)
    for day in range(1, 8):
        for hour in (1, 9):
            number, _ = ledger.newest_look("desk")
            ledger.commit(world.entry(RELEASED + day * DAY + hour * 3600, number))
    whole = ledger.history("damage-photos", "1")
    first = ledger.history("damage-photos", "1", limit=3)
    second = ledger.history("damage-photos", "1", limit=9, before=first[-1][0])

    assert [(day, look) for day, look, _ in whole] == [
        (date(2026, 11, 9) - timedelta(days=i), 14 - 2 * i) for i in range(7)
    ]
    assert first + second == whole
    assert [
        d.day for d, _, _ in ledger.history("damage-photos", "1", since=date(2026, 11, 5), until=date(2026, 11, 6))
    ] == [6, 5]
    assert ledger.history("damage-photos", "1", "depot", "Elm") == []


def test_events_are_paged_from_the_newest_and_filtered(ledger: Ledger) -> None:
    """Pages of events join without gap or overlap; promise and kinds select."""
    extra = tuple(Event(kind, "", "", "", "", None, {"source": "desk"}) for kind in ("source-failed", "late-labels"))
    world = World(2, rate=0.2)
    ledger.commit(world.entry(RELEASED + 4 * DAY, 0, extra=extra))
    ledger.commit(world.entry(RELEASED + 5 * DAY, 1, extra=extra))
    whole = ledger.events()
    first = ledger.events(limit=3)
    second = ledger.events(before=(first[-1].look, first[-1].n))

    assert first + second == whole
    assert [(e.look, e.n) for e in whole] == sorted(((e.look, e.n) for e in whole), reverse=True)
    assert {e.event.kind for e in ledger.events(promise="damage-photos")} == {"breach"}
    assert [e.event.kind for e in ledger.events(kinds=["late-labels"])] == ["late-labels"] * 2
    assert whole[0].at == moment(RELEASED + 5 * DAY)


def test_an_acknowledgement_is_shown_at_the_event_it_answers(ledger: Ledger) -> None:
    """The first one who acknowledged is named; other events stay unanswered."""
    ledger.commit(World(2, rate=0.2).entry(RELEASED + 4 * DAY, 0))
    for n, who in enumerate(("duty officer", "somebody later")):
        facts = {"look": 1, "event": 1, "who": who, "why": "known"}
        event = Event("acknowledged", "damage-photos", "1", "", "", None, facts)
        ledger.commit(Entry("", RELEASED + 5 * DAY, "acknowledge", METHOD, n and 2, (), (event,)))

    by_number = {e.n: e.acknowledged_by for e in ledger.events(promise="damage-photos") if e.look == 1}
    assert by_number == {0: None, 1: "duty officer", 2: None}


def test_notices_have_derived_keys_and_one_retraining_notice_for_each_breach_number(ledger: Ledger) -> None:
    """Further slices join a breach number and start nothing; the same draft again adds no row."""
    world = World(2, rate=0.2)
    entry = world.entry(RELEASED + 4 * DAY, 0)
    ledger.commit(entry)
    retraining = ledger.notices(route="retraining")
    log = ledger.waiting("log", moment(RELEASED + 4 * DAY))

    assert [n.key for n in retraining] == [retraining_key("00ff", "retraining", "damage-photos", "1", 1)]
    assert [n.key for n in log] == [event_key("00ff", "log", 1, n) for n in range(len(entry.events))]
    assert len(log) == 3
    assert (log[0].kind, log[0].look, log[0].event, log[0].tries) == ("breach", 1, 0, 0)
    assert len({*(n.key for n in log), retraining[0].key, message_key("00ff", "log", 1)}) == 5

    again = Event("breach", "damage-photos", "1", "", "", None, {})
    drafts = (NoticeDraft("retraining", 0, 1), NoticeDraft("retraining", 0, 2))
    ledger.commit(replace(world.entry(RELEASED + 5 * DAY, 1), events=(again,), notices=drafts))

    assert sorted(n.breach_number or 0 for n in ledger.notices(route="retraining")) == [1, 2]


def test_answers_are_recorded_and_waiting_notices_come_when_due(ledger: Ledger) -> None:
    """A failed try waits until its next time, a delivered notice leaves the queue, a withdrawn breach cancels."""
    ledger.commit(World(2, rate=0.2).entry(RELEASED + 4 * DAY, 0))
    now = moment(RELEASED + 4 * DAY)
    assert now is not None
    first, second, _ = ledger.waiting("log", now)
    ledger.record_answer("log", first.key, state="waiting", answer="503", next_at=now + timedelta(minutes=10), tries=1)
    ledger.record_answer("log", second.key, state="delivered", answer="200", next_at=None, tries=1)

    assert len(ledger.waiting("log", now)) == 1
    assert ledger.waiting("log", now + timedelta(minutes=10))[0].key == first.key
    assert ledger.undelivered("log")[0].key == first.key
    assert ledger.notice("log", first.key) == replace(first, answer="503", next_at=now + timedelta(minutes=10), tries=1)
    assert ledger.notice_counts() == {("log", "waiting"): 2, ("log", "delivered"): 1, ("retraining", "waiting"): 1}
    assert [n.key for n in ledger.notices(state="delivered")] == [second.key]
    with pytest.raises(UsageError, match="does not exist"):
        ledger.record_answer("log", "nothing", state="dead", answer=None, next_at=None, tries=1)
    assert ledger.cancel_breach("damage-photos", "1", 1) == 1
    assert ledger.notice_counts()["retraining", "cancelled"] == 1


def test_heartbeats_are_written_once_a_period(ledger: Ledger) -> None:
    """A notice with the key of its period is a single row, however often it is added."""
    ledger.commit(World(2, rate=0.2).entry(RELEASED + 4 * DAY, 0))
    key = period_key(ledger.id, "log", "heartbeat", "", RELEASED)
    beat = replace(ledger.notices(route="log")[0], key=key, kind="heartbeat", event=None, promise="", version="")

    assert (ledger.add_notices([beat, beat]), ledger.add_notices([beat])) == (1, 0)
    assert [n for n in ledger.notices(route="log") if n.kind == "heartbeat"] == [beat]


def test_rejects_are_bounded_replaced_and_deletable(ledger: Ledger) -> None:
    """At most 20 samples a reason are kept, a new look replaces those it brings; counts are the newest look's."""
    rows = [
        RejectedRow("damage-photos", reason, "a.csv", i, None if i else "\ud800", {"label": None, "x": "\x00"})
        for reason in ("bad-time", "no-id")
        for i in range(25)
    ]
    world = World(2)
    counts = {"damage-photos": {"bad-time": 25, "no-id": 25}}
    ledger.commit(world.entry(RELEASED + DAY, 0, rejected=tuple(rows), rejected_counts=counts))
    ledger.commit(
        world.entry(
            RELEASED + 2 * DAY, 1, rejected=(rows[0],), rejected_counts={"damage-photos": {"bad-time": 1, "no-id": 0}}
        )
    )
    found, samples = ledger.rejects("damage-photos")

    assert found == {"bad-time": 1}
    assert samples == [rows[0], *rows[25:45]]
    assert ledger.forget_rejects("damage-photos") == 21
    assert ledger.rejects("damage-photos") == ({"bad-time": 1}, [])
    assert ledger.rejects("other") == ({}, [])
    assert audit(ledger, replay=SimpleReplay()).ok


def test_the_state_of_a_source_is_kept_beside_the_chain(ledger: Ledger) -> None:
    """State comes back to the microsecond, with a commit or alone, and moves no head."""
    now = moment(RELEASED)
    assert now is not None
    state = SourceState("desk", now + timedelta(microseconds=7), now, 0, 3, None, None, None, 0.25, "sig")
    head = ledger.commit(World(2).entry(RELEASED + DAY, 0), state=state)

    assert ledger.source_state("desk") == state
    failed = replace(state, failures=1, failures_total=4, reason="missing", detail="labels.csv", failing_since=now)
    ledger.save_source_state(failed)
    ledger.save_source_state(SourceState("yard", now))

    assert ledger.source_state("desk") == failed
    assert ledger.source_state("unknown") == SourceState("unknown")
    assert [s.source for s in ledger.source_states()] == ["desk", "yard"]
    assert ledger.head() == head


def test_tokens_are_found_by_digest_until_they_are_revoked(ledger: Ledger) -> None:
    """Only digests are stored; names are not used twice; a revoked token opens nothing."""
    now = moment(RELEASED)
    assert now is not None
    ledger.tokens.add("board", "read", "ab" * 32, now)

    found = ledger.tokens.find("ab" * 32)
    assert found is not None
    assert (found.name, found.role, found.revoked) == ("board", "read", None)
    with pytest.raises(UsageError, match="exists already"):
        ledger.tokens.add("board", "act", "cd" * 32, now)
    with pytest.raises(UsageError, match="allowed are read, act"):
        ledger.tokens.add("other", "admin", "cd" * 32, now)  # type: ignore[arg-type]
    ledger.tokens.revoke("board", now)
    assert ledger.tokens.find("ab" * 32) is None
    assert ledger.tokens.listed()[0].revoked == now
    with pytest.raises(UsageError, match="does not exist or is revoked"):
        ledger.tokens.revoke("board", now)


def test_reports_are_archived_by_week_and_revision_with_their_notices(ledger: Ledger) -> None:
    """A second report of a week is its next revision; bytes come back equal; the notice is in the same transaction."""
    head = ledger.commit(World(2, rate=0.2).entry(RELEASED + 4 * DAY, 0))
    now = moment(RELEASED + 7 * DAY)
    assert now is not None
    key = period_key(ledger.id, "log", "report", "2026-W45", RELEASED)
    notice = replace(ledger.notices(route="log")[0], key=key, kind="report", event=None)
    files = [("report.html", b"<p>"), ("report.csv", b"a,b")]
    revisions = [
        ledger.reports.add("2026-W45", files, head=head, created=now, final=final, notices=[notice])
        for final in (False, True)
    ]

    assert revisions == [0, 1]
    assert [(r.revision, r.name, r.final) for r in ledger.reports.listed()] == [
        (1, "report.csv", True),
        (1, "report.html", True),
        (0, "report.csv", False),
        (0, "report.html", False),
    ]
    assert ledger.reports.content("2026-W45", 1, "report.html") == b"<p>"
    assert ledger.reports.content("2026-W46", 0, "report.html") is None
    assert [n.key for n in ledger.notices() if n.kind == "report"] == [key]
