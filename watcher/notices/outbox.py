"""What leaves when: the waiting notices of a route as messages, and one pass that sends those that are due.

At least once: a notice is recorded as delivered after the receiver's answer, so a crash between the two sends it again,
with the same id and keys. Ordered per (route, promise): a message waits while an earlier one about one of its promises
waits. What was given up holds up nothing.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from typing import Any

import structlog

from watcher.notices.backoff import next_try
from watcher.notices.base import Delivery, Message, Outbox, Outcome, RouteSpec, Sender
from watcher.records import Notice

_log = structlog.get_logger("watcher.notices")

Write = Callable[[RouteSpec, str, Sequence[Notice]], Message]
"""(route, message id, notices) -> message"""


@dataclass(frozen=True, slots=True)
class Parcel:
    """Notices that travel together."""

    id: str
    notices: tuple[Notice, ...]

    @property
    def promises(self) -> frozenset[str]:
        """Whose order it must keep."""
        return frozenset(notice.promise for notice in self.notices)

    @property
    def keys(self) -> tuple[str, ...]:
        """The keys of its notices."""
        return tuple(notice.key for notice in self.notices)

    @property
    def due(self) -> datetime:
        """When it may be tried."""
        return min(notice.next_at for notice in self.notices)


@dataclass(frozen=True, slots=True)
class Attempt:
    """One try to deliver, as it is logged."""

    route: str
    message: str
    keys: tuple[str, ...]
    look: int
    outcome: Outcome
    answer: str


@dataclass(slots=True)
class Pass:
    """What one pass over the routes did."""

    attempts: list[Attempt] = field(default_factory=list)
    cancelled: list[str] = field(default_factory=list)
    """Keys of breach notices whose breach was withdrawn before delivery."""
    interrupted: bool = False
    """The lease was lost or the daemon is stopping."""


def parcels(route: RouteSpec, waiting: Sequence[Notice], message_id: Callable[[str, int], str]) -> list[Parcel]:
    """The waiting notices of a route as messages, in the order in which they leave.

    The events of one look travel together under `message_id(route, look)`. A retraining notice travels alone under its
    own key, since it must stay one notice whatever else the look brought; so do heartbeat, reminder and report: they are
    made after the look whose number they bear, and a receiver that knows the look's message would drop them as repeated.
    """
    ordered = sorted(waiting, key=_place)
    found = []
    for (_, alone, _), group in itertools.groupby(ordered, key=lambda notice: _bundle(route, notice)):
        notices = tuple(group)
        found.append(Parcel(notices[0].key if alone else message_id(route.name, notices[0].look), notices))
    return found


def _place(notice: Notice) -> tuple[int, bool, int, datetime, str]:
    return (notice.look, notice.event is None, notice.event or 0, notice.created, notice.key)


def _bundle(route: RouteSpec, notice: Notice) -> tuple[int, bool, str]:
    alone = route.retrain or notice.event is None
    return (notice.look, alone, notice.key if alone else "")


def send_due(
    outbox: Outbox,
    routes: Sequence[RouteSpec],
    senders: Mapping[str, Sender],
    write: Write,
    *,
    clock: Callable[[], datetime],
    may_send: Callable[[], bool] = lambda: True,
) -> Pass:
    """One pass: try every message that is due, in order, and record what became of it.

    `senders` by the name of the route; `clock` gives aware times; `may_send` is asked before each request and ends the
    pass when it says no (the lease is lost, the daemon stops). A sender's failure never reaches the caller; an error of
    the outbox does, and leaves what was not recorded waiting.
    """
    done = Pass()
    for route in routes:
        _send_route(outbox, route, senders[route.name], write, clock, may_send, done)
        if done.interrupted:
            break
    return done


def _send_route(
    outbox: Outbox,
    route: RouteSpec,
    sender: Sender,
    write: Write,
    clock: Callable[[], datetime],
    may_send: Callable[[], bool],
    done: Pass,
) -> None:
    waiting = _unless_ended(outbox, route, outbox.waiting(route.name))
    held: set[str] = set()
    for found in parcels(route, waiting, outbox.message_id):
        parcel = _without_withdrawn(outbox, found, done)
        if parcel is None:
            continue
        if parcel.due > clock() or parcel.promises & held:
            held |= parcel.promises
            continue
        if not may_send():
            done.interrupted = True
            return
        delivery = _try(sender, write, route, parcel)
        still_waiting = _settle(outbox, route, parcel, delivery, clock())
        done.attempts.append(
            Attempt(route.name, parcel.id, parcel.keys, parcel.notices[0].look, delivery.outcome, delivery.recorded)
        )
        if delivery.outcome == "gone":
            _unless_ended(outbox, route, [n for n in waiting if n.key not in parcel.keys], by_now=True)
            return
        if still_waiting:
            held |= parcel.promises
            if delivery.unreachable:
                # Nobody answers: trying the other messages would cost one time-out each, and tell nothing new.
                return


def _unless_ended(
    outbox: Outbox, route: RouteSpec, waiting: Sequence[Notice], *, by_now: bool = False
) -> Sequence[Notice]:
    """What is left to send when the receiver may have ended the route by 410: nothing new goes to the same address.

    A notice that somebody sends again by hand keeps its earlier answer and is tried; the route is open again when no
    notice is left that was given up with a 410 of this address.
    """
    if not by_now and not outbox.ended(route.name, _gone(route)):
        return waiting
    ended = [notice for notice in waiting if by_now or notice.answer is None]
    answer = f"not sent: the receiver ended this route with a 410 ({route.address})"
    _record(outbox, ended, state="dead", answer=answer)
    return [notice for notice in waiting if notice not in ended]


def _gone(route: RouteSpec) -> str:
    return f"gone {route.address}"


def _without_withdrawn(outbox: Outbox, parcel: Parcel, done: Pass) -> Parcel | None:
    """The parcel without breaches that were withdrawn before they were delivered; None when nothing is left."""
    withdrawn = [n for n in parcel.notices if n.kind == "breach" and outbox.withdrawn(n)]
    if not withdrawn:
        return parcel
    _record(outbox, withdrawn, state="cancelled", answer="the breach was withdrawn before delivery")
    done.cancelled += [notice.key for notice in withdrawn]
    left = tuple(notice for notice in parcel.notices if notice not in withdrawn)
    return Parcel(parcel.id, left) if left else None


def _record(outbox: Outbox, notices: Sequence[Notice], **changes: Any) -> None:
    if notices:
        outbox.settle([replace(notice, **changes) for notice in notices])


def _try(sender: Sender, write: Write, route: RouteSpec, parcel: Parcel) -> Delivery:
    try:
        return sender.deliver(write(route, parcel.id, parcel.notices))
    except Exception as error:  # noqa: BLE001 - logged whole, and the message is tried again
        # One message that cannot be written or sent must not keep the others from leaving.
        _log.exception("message could not be sent", message=parcel.id, route=route.name, look=parcel.notices[0].look)
        return Delivery("temporary", f"could not be sent: {type(error).__name__}")


def _settle(outbox: Outbox, route: RouteSpec, parcel: Parcel, delivery: Delivery, now: datetime) -> bool:
    """Record the outcome; True when the parcel waits for another try."""
    tries = max(notice.tries for notice in parcel.notices) + 1
    again = next_try(tries, min(notice.created for notice in parcel.notices), now)
    answer = delivery.recorded
    if delivery.outcome == "temporary" and again is not None:
        _record(outbox, parcel.notices, tries=tries, answer=answer, next_at=again)
        return True
    state = "delivered" if delivery.outcome == "delivered" else "dead"
    answer = f"{_gone(route)}: {answer}" if delivery.outcome == "gone" else answer
    _record(outbox, parcel.notices, tries=tries, answer=answer, state=state)
    return False
