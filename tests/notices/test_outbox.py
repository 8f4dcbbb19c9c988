"""The sending pass with an injected clock. Check values: the issue's figures (26 h, 1,000 notices, 15 minutes), computed."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from datetime import timedelta

import pytest
from notices.memory import T0, Clock, Memory, breach_event, some_event

from watcher.notices.base import Delivery, Message, RouteSpec, WebhookTarget
from watcher.notices.message import Writer
from watcher.notices.outbox import Pass, parcels, send_due

DESK = RouteSpec("desk", WebhookTarget("http://127.0.0.1:9/"))
RETRAIN = RouteSpec("retraining", WebhookTarget("http://127.0.0.1:9/"), retrain=True)
OK = Delivery("delivered", "HTTP 204")
DOWN = Delivery("temporary", "ConnectError", unreachable=True)


class Peer:
    """A receiver that keeps what it takes; `answer` decides."""

    def __init__(self, answer: Callable[[Message], Delivery] = lambda _: OK) -> None:
        self.answer = answer
        self.tried: list[Message] = []
        self.taken: list[Message] = []

    def deliver(self, message: Message) -> Delivery:
        self.tried.append(message)
        delivery = self.answer(message)
        if delivery.outcome == "delivered":
            self.taken.append(message)
        return delivery

    @property
    def keys(self) -> list[str]:
        return [item.key for message in self.taken for item in message.items]


def _pass(
    memory: Memory, peer: Peer, clock: Clock, *routes: RouteSpec, may_send: Callable[[], bool] = lambda: True
) -> Pass:
    chosen = routes or (DESK,)
    senders = {route.name: peer for route in chosen}
    return send_due(memory, chosen, senders, Writer(memory, lambda *_: ""), clock=clock, may_send=may_send)


def _run(memory: Memory, peer: Peer, clock: Clock, span: timedelta, every: timedelta = timedelta(seconds=10)) -> None:
    """Passes at the daemon's rhythm."""
    until = clock.now + span
    while clock.now < until:
        _pass(memory, peer, clock)
        clock.now += every


def test_the_notices_of_one_look_travel_as_one_message_that_lists_their_keys() -> None:
    """Its id derives from ledger, route and look; the next look is another message."""
    memory, peer = Memory(), Peer()
    first = [memory.happen(some_event(kind), 3, n, T0, "desk")[0] for n, kind in enumerate(("warning", "stale"))]
    second = memory.happen(some_event(), 4, 0, T0, "desk")
    done = _pass(memory, peer, Clock())

    assert [[item.key for item in message.items] for message in peer.taken] == [first, second]
    assert [message.id for message in peer.taken] == [memory.message_id("desk", 3), memory.message_id("desk", 4)]
    assert [attempt.outcome for attempt in done.attempts] == ["delivered", "delivered"]


def test_a_retraining_notice_travels_alone_with_its_own_key() -> None:
    """Two breaches of one look are two messages, each with the key of its notice as id and type `watcher.retraining`."""
    memory, peer = Memory(), Peer()
    keys = [memory.happen(breach_event(promise), 3, n, T0, "retraining", number=1)[0] for n, promise in enumerate("ab")]
    _pass(memory, peer, Clock(), RETRAIN)

    assert [message.id for message in peer.taken] == keys
    assert {message.type for message in peer.taken} == {"watcher.retraining"}


def test_a_heartbeat_does_not_hide_behind_the_message_of_its_look() -> None:
    """It bears the number of the newest look but has an id of its own, or receivers would drop it as repeated."""
    memory, peer, clock = Memory(), Peer(), Clock()
    memory.happen(some_event(), 3, 0, T0, "desk")
    beat = memory.periodic("desk", "heartbeat", 3, T0)
    _pass(memory, peer, clock)

    assert [(m.id, m.type) for m in peer.taken] == [
        (memory.message_id("desk", 3), "watcher.notices"),
        (beat, "watcher.heartbeat"),
    ]


def test_a_message_waits_behind_an_earlier_one_of_its_promise_and_passes_those_of_others() -> None:
    """Order holds per (route, promise): b's notice is not kept back by a's."""
    memory, clock = Memory(), Clock()
    peer = Peer(lambda m: Delivery("temporary", "HTTP 404") if m.look == 1 and len(peer.tried) < 3 else OK)
    a1, b2, a3 = (
        memory.happen(some_event(promise=p), look, 0, T0, "desk")[0] for look, p in ((1, "a"), (2, "b"), (3, "a"))
    )
    _pass(memory, peer, clock)
    at_first = list(peer.keys)
    clock.forward(seconds=5)
    _pass(memory, peer, clock)

    assert at_first == [b2]
    assert peer.keys == [b2, a1, a3]


def test_a_message_about_two_promises_waits_for_both() -> None:
    """And what comes after it waits for it."""
    memory, clock = Memory(), Clock()
    peer = Peer(lambda m: Delivery("temporary", "HTTP 404") if m.look == 1 else OK)
    memory.happen(some_event(promise="a"), 1, 0, T0, "desk")
    memory.happen(some_event(promise="a"), 2, 0, T0, "desk")
    memory.happen(some_event(promise="b"), 2, 1, T0, "desk")
    memory.happen(some_event(promise="b"), 3, 0, T0, "desk")
    (c4,) = memory.happen(some_event(promise="c"), 4, 0, T0, "desk")
    _pass(memory, peer, clock)

    assert peer.keys == [c4]


def test_a_thousand_notices_of_26_hours_arrive_within_15_minutes_in_order_each_key_once() -> None:
    """A receiver that was down for 26 h with notices coming in all the time, for 40 promises over 700 looks."""
    memory, clock = Memory(), Clock()
    peer = Peer(lambda _: DOWN)
    made: dict[str, list[str]] = {}
    for number in range(1000):
        look, promise = 1 + number * 700 // 1000, f"p{number * 7 % 40:02}"
        at = T0 + timedelta(hours=25) * (look / 700)
        made.setdefault(promise, []).append(memory.happen(some_event(promise=promise), look, number, at, "desk")[0])
    _run(memory, peer, clock, timedelta(hours=26), timedelta(minutes=10))
    tried_while_down = len(peer.tried)
    peer.answer = lambda _: OK
    _run(memory, peer, clock, timedelta(minutes=15), timedelta(seconds=30))
    arrived: dict[str, list[str]] = {}
    for message in peer.taken:
        for item in message.items:
            arrived.setdefault(item.promise, []).append(item.key)

    assert arrived == made
    assert set(Counter(peer.keys).values()) == {1}
    assert len(peer.keys) == 1000
    assert set(memory.states()) == {"delivered"}
    # One try a pass while nobody answers, not one for each waiting message.
    assert tried_while_down <= 26 * 6


class Killed(BaseException):
    """Stands for kill -9 at this point."""


def test_a_kill_between_the_answer_and_our_record_delivers_exactly_twice_with_the_same_key() -> None:
    """At least once: the second delivery bears the same id and keys, and there is no third."""
    memory, peer, clock = Memory(), Peer(), Clock()
    (key,) = memory.happen(some_event(), 3, 0, T0, "desk")

    def die() -> None:
        raise Killed

    memory.before_record = die
    with pytest.raises(Killed):
        _pass(memory, peer, clock)
    memory.before_record = lambda: None
    _run(memory, peer, clock, timedelta(hours=1))

    assert peer.keys == [key, key]
    assert len({message.id for message in peer.taken}) == 1
    assert peer.taken[0] == peer.taken[1]


def test_a_notice_is_dead_after_seven_days_and_then_blocks_nothing() -> None:
    """The next notice of the same promise is tried although it, too, is older than seven days."""
    memory, clock = Memory(), Clock()
    peer = Peer(lambda m: Delivery("temporary", "HTTP 404") if m.look == 1 else OK)
    (first,) = memory.happen(some_event(), 1, 0, T0, "desk")
    (second,) = memory.happen(some_event(), 2, 0, T0, "desk")
    _run(memory, peer, clock, timedelta(days=7, hours=2), timedelta(minutes=10))

    assert (memory.notices[first].state, memory.notices[second].state) == ("dead", "delivered")
    assert memory.notices[first].answer == "HTTP 404"


def test_a_permanent_refusal_is_dead_at_once() -> None:
    """With the receiver's answer."""
    memory, clock = Memory(), Clock()
    peer = Peer(lambda _: Delivery("permanent", "HTTP 409", status="refused", reference="r1"))
    (key,) = memory.happen(some_event(), 1, 0, T0, "desk")
    _pass(memory, peer, clock)

    assert (memory.notices[key].state, memory.notices[key].answer) == ("dead", "HTTP 409; status refused; reference r1")


def test_410_ends_the_route_for_its_address_and_another_address_opens_it() -> None:
    """What waits is given up unsent, also notices that come later; a changed url is another receiver."""
    memory, peer, clock = Memory(), Peer(lambda _: Delivery("gone", "HTTP 410")), Clock()
    for look in (1, 2):
        memory.happen(some_event(), look, 0, T0, "desk")
    _pass(memory, peer, clock)
    (later,) = memory.happen(some_event(), 3, 0, T0, "desk")
    _pass(memory, peer, clock)
    tried = len(peer.tried)
    elsewhere = RouteSpec("desk", WebhookTarget("http://127.0.0.1:10/"))
    peer.answer = lambda _: OK
    (last,) = memory.happen(some_event(), 4, 0, T0, "desk")
    _pass(memory, peer, clock, elsewhere)

    assert tried == 1
    assert memory.notices[later].state == "dead"
    assert "not sent" in (memory.notices[later].answer or "")
    assert peer.keys == [last]


def test_sending_the_refused_notice_again_by_hand_opens_an_ended_route() -> None:
    """`watcher notices` sets it waiting with its answer kept; when it arrives the route carries new notices again."""
    memory, peer, clock = Memory(), Peer(lambda _: Delivery("gone", "HTTP 410")), Clock()
    (first,) = memory.happen(some_event(), 1, 0, T0, "desk")
    _pass(memory, peer, clock)
    memory.send_again(first)
    peer.answer = lambda _: OK
    _pass(memory, peer, clock)
    (second,) = memory.happen(some_event(), 2, 0, T0, "desk")
    _pass(memory, peer, clock)

    assert peer.keys == [first, second]


def test_the_lease_is_asked_for_before_each_request() -> None:
    """It is lost after the second: nothing more is sent, what is left waits untouched."""
    memory, peer, clock = Memory(), Peer(), Clock()
    for look in range(1, 5):
        memory.happen(some_event(), look, 0, T0, "desk")
    asked: list[int] = []

    def may_send() -> bool:
        asked.append(len(peer.tried))
        return len(asked) <= 2

    done = _pass(memory, peer, clock, DESK, may_send=may_send)

    assert (asked, done.interrupted) == ([0, 1, 2], True)
    assert [(n.state, n.tries) for n in memory.notices.values()] == [("delivered", 1)] * 2 + [("waiting", 0)] * 2


def test_a_breach_withdrawn_before_delivery_cancels_its_notice_and_nothing_else() -> None:
    """The other notices of the look leave, under the same message id."""
    memory, peer, clock = Memory(), Peer(), Clock()
    (breach,) = memory.happen(breach_event(), 3, 0, T0, "desk")
    (stale,) = memory.happen(some_event("stale"), 3, 1, T0, "desk")
    (retrain,) = memory.happen(breach_event(), 3, 0, T0, "retraining", number=1)
    memory.withdrawn_keys |= {breach, retrain}
    done = _pass(memory, peer, clock, DESK, RETRAIN)

    assert peer.keys == [stale]
    assert peer.taken[0].id == memory.message_id("desk", 3)
    assert (memory.notices[breach].state, memory.notices[retrain].state) == ("cancelled", "cancelled")
    assert sorted(done.cancelled) == sorted([breach, retrain])


def test_a_sender_that_breaks_keeps_neither_other_routes_nor_other_promises_waiting() -> None:
    """A fault of ours on one message is recorded as a failed try, and the rest leaves."""
    memory, clock = Memory(), Clock()

    def break_for_a(message: Message) -> Delivery:
        if message.subject.startswith("a/"):
            raise RuntimeError("fault")
        return OK

    peer = Peer(break_for_a)
    (a,) = memory.happen(some_event(promise="a"), 1, 0, T0, "desk")
    (b,) = memory.happen(some_event(promise="b"), 2, 0, T0, "desk")
    _pass(memory, peer, clock)

    assert peer.keys == [b]
    assert (memory.notices[a].state, memory.notices[a].answer) == ("waiting", "could not be sent: RuntimeError")


def test_a_dead_receiver_of_one_route_does_not_touch_another_route() -> None:
    """Each route has its own order and its own failures."""
    memory, clock = Memory(), Clock()
    lost, kept = RouteSpec("lost", DESK.target), RouteSpec("kept", DESK.target)
    memory.happen(some_event(), 1, 0, T0, "lost", "kept")
    down, up = Peer(lambda _: DOWN), Peer()
    send_due(memory, (lost, kept), {"lost": down, "kept": up}, Writer(memory, lambda *_: ""), clock=clock)

    assert (len(down.tried), len(up.taken)) == (1, 1)


def test_the_order_of_the_outbox_does_not_matter() -> None:
    """Parcels come in the order of looks and events however the rows arrive."""
    memory = Memory()
    for look, n in ((2, 1), (1, 0), (2, 0)):
        memory.happen(some_event(), look, n, T0, "desk")
    rows = list(memory.waiting("desk"))
    forward, backward = (parcels(DESK, order, memory.message_id) for order in (rows, rows[::-1]))

    assert forward == backward
    assert [[n.event for n in parcel.notices] for parcel in forward] == [[0], [0, 1]]


def test_keys_and_ids_are_only_read() -> None:
    """The pass changes state, tries, next_at and answer of a notice, nothing else."""
    memory, peer, clock = Memory(), Peer(lambda _: DOWN), Clock()
    (key,) = memory.happen(some_event(), 1, 0, T0, "desk")
    before = memory.notices[key]
    _pass(memory, peer, clock)
    after = memory.notices[key]

    assert (after.tries, after.next_at, after.answer) == (1, T0 + timedelta(seconds=5), "ConnectError")
    assert (after.key, after.look, after.event, after.created) == (
        before.key,
        before.look,
        before.event,
        before.created,
    )
