"""The sending pass on a real ledger in memory, with a real HTTP receiver."""

from __future__ import annotations

import json
import socket
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from fractions import Fraction
from typing import Any

import pytest
from notices.memory import LEDGER, T0, Clock, breach_event, some_event, some_standing, some_terms
from peers.http_receiver import Receiver, Reply, receiver
from standardwebhooks import Webhook

from watcher.ledger import keys
from watcher.ledger.store import Ledger
from watcher.ledger.terms import terms_digest
from watcher.notices.base import RouteSpec, WebhookTarget
from watcher.notices.booked import Booked
from watcher.notices.due import due_now, notice_of
from watcher.notices.message import Writer
from watcher.notices.outbox import Pass, send_due
from watcher.notices.webhook import WebhookSender
from watcher.records import Cell, Entry, Event, NoticeDraft, Remarks, TermDraft

# The published vector's secret, section 9_formats of the check values.
SECRET = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"
RETRAIN = "retraining"


@pytest.fixture
def ledger() -> Iterator[Ledger]:
    with Ledger.memory(new_id=LEDGER) as made, made.writer():
        yield made


def _look(
    ledger: Ledger, at: datetime, events: Sequence[Event], routes: Sequence[str], number: int | None = None
) -> int:
    """A look that brings these events, each with a notice for every route."""
    promises = sorted({event.promise for event in events})
    known = {term.terms.promise for term in ledger.terms()}
    entry = Entry(
        source="inspection-desk",
        at=int(at.timestamp()),
        kind="pull",
        method=1,
        expected=ledger.newest_look("inspection-desk")[0],
        terms=tuple(_draft(promise, new=promise not in known) for promise in promises),
        events=tuple(events),
        notices=tuple(
            NoticeDraft(route, n, number if route == RETRAIN else None) for route in routes for n in range(len(events))
        ),
    )
    return ledger.commit(entry).look


def _draft(promise: str, *, new: bool) -> TermDraft:
    terms = some_terms(promise)
    return TermDraft(
        promise=promise,
        version="1",
        new_terms=terms if new else None,
        new_cells=(Cell("", "", Fraction(1), 0),) if new else (),
        counts=(),
        gone=(),
        sealed=(),
        sealed_until=terms.released,
        remarks=Remarks(),
        standings=(replace(some_standing(promise), terms=terms_digest(terms)),),
        memories=({},),
    )


class Sending:
    """One route to a receiver, on a ledger."""

    def __init__(self, ledger: Ledger, url: str, clock: Clock, name: str = "desk", **options: Any) -> None:
        self.route = RouteSpec(name, WebhookTarget(url, (SECRET,)), **options)
        self.books = Booked(ledger, keys.message_key)
        # The receiver's package compares the stamp with the machine's clock, so the signature is of the real time.
        self.sender = WebhookSender(self.route.target, lambda: datetime.now(UTC))
        self.clock = clock

    def run(self) -> Pass:
        return send_due(
            self.books,
            [self.route],
            {self.route.name: self.sender},
            Writer(self.books, lambda *_: ""),
            clock=self.clock,
        )


def _data(peer: Receiver) -> list[dict[str, Any]]:
    """What arrived, each message verified by the independent package."""
    return [Webhook(SECRET).verify(got.body, dict(got.headers)) for got in peer.received]


def test_the_events_of_a_look_arrive_as_one_verified_message_with_the_ledgers_keys(ledger: Ledger) -> None:
    """Keys, message id, look and head are the ledger's."""
    look = _look(ledger, T0, [breach_event(), some_event("stale")], ["desk"])
    with receiver() as peer:
        Sending(ledger, peer.url, Clock()).run()
        (told,) = _data(peer)

    assert told["id"] == keys.message_key(LEDGER, "desk", look)
    assert told["data"]["keys"] == [keys.event_key(LEDGER, "desk", look, n) for n in (0, 1)]
    assert told["data"]["head"] == str(ledger.head())
    assert {notice.state for notice in ledger.notices()} == {"delivered"}


def test_a_breach_number_starts_retraining_once_and_the_answer_is_recorded(ledger: Ledger) -> None:
    """A further slice of the same breach number makes no second notice; accepted and reference stand in the ledger."""
    _look(ledger, T0, [breach_event()], [RETRAIN], number=1)
    _look(ledger, T0 + timedelta(hours=1), [breach_event(column="depot", value="Birch")], [RETRAIN], number=1)
    with receiver() as peer:
        peer.answer = lambda _: Reply(202, b'{"status": "accepted", "reference": "run-17"}')
        sending = Sending(ledger, peer.url, Clock(T0 + timedelta(hours=2)), RETRAIN, retrain=True)
        sending.run()
        sending.run()
        (told,) = _data(peer)
    (notice,) = ledger.notices()

    assert told["id"] == keys.retraining_key(LEDGER, RETRAIN, "damage-photos", "1", 1) == notice.key
    assert sorted(told["data"]["evidence"]) == ["counts.csv", "verdict.json"]
    assert notice.answer == "HTTP 202; status accepted; reference run-17"


def test_1000_notices_and_a_receiver_down_for_26_hours(ledger: Ledger) -> None:
    """All delivered within 15 minutes of its return by the injected clock, in order per promise, each key once.

    125 looks of 8 events about 20 promises over 25 hours; nobody listens on the port until hour 26.
    """
    clock, made = Clock(), _thousand(ledger)
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    sending = Sending(ledger, f"http://127.0.0.1:{port}/hook", clock)
    while clock.now < T0 + timedelta(hours=26):
        sending.run()
        clock.forward(hours=1)
    waiting = ledger.notice_counts()["desk", "waiting"]
    with receiver(port=port) as peer:
        back = clock.now
        while clock.now < back + timedelta(minutes=15):
            sending.run()
            clock.forward(seconds=30)
        messages = _data(peer)
    arrived: dict[str, list[str]] = {}
    for message in messages:
        for notice in message["data"]["notices"]:
            arrived.setdefault(notice["promise"], []).append(notice["key"])

    assert waiting == 1000
    assert arrived == made
    assert set(Counter(key for promise_keys in arrived.values() for key in promise_keys).values()) == {1}
    assert ledger.notice_counts() == {("desk", "delivered"): 1000}


def _thousand(ledger: Ledger) -> dict[str, list[str]]:
    made: dict[str, list[str]] = {}
    for step in range(125):
        promises = sorted({f"p{(step * 8 + n) * 7 % 20:02}" for n in range(8)})
        at = T0 + timedelta(hours=25) * step / 125
        look = _look(ledger, at, [some_event("late-labels", promise, now=step) for promise in promises], ["desk"])
        for n, promise in enumerate(promises):
            made.setdefault(promise, []).append(keys.event_key(LEDGER, "desk", look, n))
    return made


class Killed(BaseException):
    """Stands for kill -9 at this point."""


def test_a_kill_between_answer_and_record_gives_exactly_two_deliveries_of_one_key(
    ledger: Ledger, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The receiver answered, the ledger does not know: the same id and keys come once more, and not a third time."""
    _look(ledger, T0, [breach_event()], ["desk"])
    with receiver() as peer:
        sending = Sending(ledger, peer.url, Clock())
        with monkeypatch.context() as patch:
            patch.setattr(Booked, "settle", _die)
            with pytest.raises(Killed):
                sending.run()
        for _ in range(5):
            sending.run()
            sending.clock.forward(minutes=10)
        first, second = peer.received

    assert first.headers["webhook-id"] == second.headers["webhook-id"]
    assert json.loads(first.body)["data"]["keys"] == json.loads(second.body)["data"]["keys"]


def _die(*_: object) -> None:
    raise Killed


def test_a_breach_withdrawn_before_delivery_is_cancelled_and_its_retraining_too(ledger: Ledger) -> None:
    """The withdrawal is an event of a later look; the notice of the withdrawal itself still leaves."""
    _look(ledger, T0, [breach_event()], ["desk", RETRAIN], number=1)
    _look(ledger, T0 + timedelta(hours=1), [some_event("breach-withdrawn")], ["desk"])
    clock = Clock(T0 + timedelta(hours=2))
    with receiver() as peer:
        Sending(ledger, peer.url, clock).run()
        Sending(ledger, peer.url, clock, RETRAIN, retrain=True).run()
        (told,) = _data(peer)
    states = {(notice.route, notice.kind): notice.state for notice in ledger.notices()}

    assert [notice["kind"] for notice in told["data"]["notices"]] == ["breach-withdrawn"]
    assert states == {
        ("desk", "breach"): "cancelled",
        (RETRAIN, "breach"): "cancelled",
        ("desk", "breach-withdrawn"): "delivered",
    }


def test_retraining_goes_on_while_another_slice_of_the_breach_number_stands(ledger: Ledger) -> None:
    """The first cell's breach is withdrawn, a slice that joined the number is not."""
    _look(ledger, T0, [breach_event(), breach_event(column="depot", value="Birch")], [RETRAIN], number=1)
    _look(ledger, T0 + timedelta(hours=1), [some_event("breach-withdrawn")], [])
    with receiver() as peer:
        Sending(ledger, peer.url, Clock(T0 + timedelta(hours=2)), RETRAIN, retrain=True).run()

        assert len(peer.received) == 1


def test_a_gone_receiver_ends_the_route_in_the_ledger(ledger: Ledger) -> None:
    """A daemon started afresh does not ask it again; nothing is kept in memory."""
    _look(ledger, T0, [some_event("stale")], ["desk"])
    with receiver() as peer:
        peer.answer = lambda _: Reply(410)
        Sending(ledger, peer.url, Clock()).run()
        _look(ledger, T0 + timedelta(hours=1), [some_event("stale")], ["desk"])
        Sending(ledger, peer.url, Clock(T0 + timedelta(hours=1))).run()

        assert len(peer.received) == 1
    assert {notice.state for notice in ledger.notices()} == {"dead"}


def test_a_periodic_notice_is_made_once_a_period_and_delivered_under_its_own_key(ledger: Ledger) -> None:
    """Three rounds within a day make one heartbeat; the next day makes the second."""
    _look(ledger, T0, [some_event("stale")], [])
    clock = Clock(T0 + timedelta(hours=1))
    with receiver() as peer:
        sending = Sending(ledger, peer.url, clock, heartbeat=86400)
        for hours in (0, 1, 2, 23):
            clock.now = T0 + timedelta(hours=1 + hours)
            for due in due_now([sending.route], [], [], clock.now):
                key = keys.period_key(LEDGER, due.route, due.kind, due.subject, due.period_start)
                ledger.add_notices([notice_of(due, key, ledger.head().look, clock.now)])
            sending.run()
        ids = [message["id"] for message in _data(peer)]

    midnight = int(T0.replace(hour=0).timestamp())
    assert ids == [keys.period_key(LEDGER, "desk", "heartbeat", "", midnight + day * 86400) for day in (0, 1)]


def test_the_ledger_must_know_the_event_of_a_notice(ledger: Ledger) -> None:
    """A place without an event is an error of its own, not another event's words."""
    _look(ledger, T0, [some_event("stale")], ["desk"])
    books = Booked(ledger, keys.message_key)

    assert books.event(1, 0).event.kind == "stale"
    with pytest.raises(LookupError, match="event 5 of look 1"):
        books.event(1, 5)
    with pytest.raises(LookupError, match="'nobody' version '1'"):
        books.terms("nobody", "1")
