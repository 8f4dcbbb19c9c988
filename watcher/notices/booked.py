"""Outbox and archive over the ledger: the ledger's own methods, by the words of this room."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any, Final, Protocol

from watcher.records import CellCounts, Head, Notice, Standing, StoredEvent, StoredTerm, Terms

_MANY: Final = 100_000
"""More notices of one route, or events of one promise, than a ledger holds in practice."""


class Store(Protocol):
    """The methods of the ledger that are used; rooms of one level do not import each other."""

    id: str

    def head(self) -> Head: ...  # noqa: D102 - documented in watcher/ledger/store.py, like all below

    def terms(self, *, source: str | None = None, open_only: bool = True) -> list[StoredTerm]: ...  # noqa: D102

    def counts(self, term_id: int, *, since: int | None = None) -> list[CellCounts]: ...  # noqa: D102

    def standings(  # noqa: D102
        self, *, promise: str | None = None, version: str | None = None, open_only: bool = False
    ) -> list[Standing]: ...

    def events(  # noqa: D102
        self,
        *,
        promise: str | None = None,
        kinds: Sequence[str] | None = None,
        limit: int = 100,
        before: tuple[int, int] | None = None,
    ) -> list[StoredEvent]: ...

    def undelivered(self, route: str, *, limit: int = 1000) -> list[Notice]: ...  # noqa: D102

    def notices(  # noqa: D102
        self, *, route: str | None = None, state: str | None = None, promise: str | None = None, limit: int = 100
    ) -> list[Notice]: ...

    def record_answers(self, notices: Iterable[Notice]) -> None: ...  # noqa: D102


@dataclass(frozen=True, slots=True)
class Booked:
    """`Outbox` and `Archive` of a ledger; `message_key` is the ledger's derivation from (ledger id, route, look).

    It remembers what cannot change, so each thread that sends needs one of its own.
    """

    store: Store
    message_key: Callable[[str, str, int], str]
    _known: dict[tuple[str, str], StoredTerm] = field(default_factory=dict, init=False, repr=False)
    """Terms are frozen, so what was read once stays true."""
    _stand: dict[tuple[int, str, str], Sequence[Standing]] = field(default_factory=dict, init=False, repr=False)
    """Standings change with a look only; a receiver that comes back gets many messages between two looks."""

    @property
    def ledger_id(self) -> str:
        """The ledger's own id."""
        return self.store.id

    def waiting(self, route: str) -> Sequence[Notice]:
        """Every waiting notice of the route, due or not."""
        return self.store.undelivered(route, limit=_MANY)

    def ended(self, route: str, mark: str) -> bool:
        """Whether a notice of this route was given up with an answer that begins with `mark`."""
        given_up = self.store.notices(route=route, state="dead", limit=_MANY)
        return any((notice.answer or "").startswith(mark) for notice in given_up)

    def withdrawn(self, notice: Notice) -> bool:
        """Whether every breach that this notice tells of was withdrawn since."""
        events = self.store.events(promise=notice.promise, kinds=("breach", "breach-withdrawn"), limit=_MANY)
        return all_withdrawn(notice, events)

    def message_id(self, route: str, look: int) -> str:
        """The id of the message that carries the notices of one look."""
        return self.message_key(self.ledger_id, route, look)

    def settle(self, notices: Sequence[Notice]) -> None:
        """Record what became of these notices, in one transaction."""
        self.store.record_answers(notices)

    def head(self) -> Head:
        """The newest look with the digest of the chain up to it."""
        return self.store.head()

    def event(self, look: int, n: int) -> StoredEvent:
        """One event. LookupError where the ledger has none at that place."""
        found = self.store.events(before=(look, n + 1), limit=1)
        if not found or (found[0].look, found[0].n) != (look, n):
            raise LookupError(f"event {n} of look {look} is not in the ledger")
        return found[0]

    def terms(self, promise: str, version: str) -> Terms:
        """The frozen terms, also of a promise that is closed."""
        return self._term(promise, version).terms

    def standings(self, promise: str, version: str) -> Sequence[Standing]:
        """Where the promise and its slices stand now, the whole first."""
        place = (self.store.head().look, promise, version)
        if place not in self._stand:
            self._forget(place[0])
            self._stand[place] = self.store.standings(promise=promise, version=version)
        return self._stand[place]

    def counts(self, promise: str, version: str) -> Sequence[CellCounts]:
        """Every count of the promise."""
        return self.store.counts(self._term(promise, version).id)

    def _forget(self, look: int) -> None:
        for place in [place for place in self._stand if place[0] != look]:
            del self._stand[place]

    def _term(self, promise: str, version: str) -> StoredTerm:
        if (promise, version) not in self._known:
            found = self.store.terms(open_only=False)
            self._known.update({(term.terms.promise, term.terms.version): term for term in found})
        if (promise, version) in self._known:
            return self._known[promise, version]
        raise LookupError(f"promise {promise!r} version {version!r} is not in the ledger")


def all_withdrawn(notice: Notice, events: Iterable[StoredEvent]) -> bool:
    """Whether every breach that a notice tells of was withdrawn after it.

    An ordinary notice tells of its own event. A retraining notice stands for its breach number, which further slices
    may have joined: it is withdrawn when all of them are. `events`: the breaches and withdrawals of the promise.
    """
    of_version = [stored for stored in events if stored.event.version == notice.version]
    breaches = [stored for stored in of_version if stored.event.kind == "breach" and _told_by(notice, stored)]
    withdrawals = [stored for stored in of_version if stored.event.kind == "breach-withdrawn"]
    return bool(breaches) and all(any(_takes_back(w, b) for w in withdrawals) for b in breaches)


def _told_by(notice: Notice, breach: StoredEvent) -> bool:
    if notice.breach_number is None:
        return (breach.look, breach.n) == (notice.look, notice.event)
    number: Any = breach.event.facts.get("number")
    return number is not None and int(number) == notice.breach_number


def _takes_back(withdrawal: StoredEvent, breach: StoredEvent) -> bool:
    same = (withdrawal.event.column, withdrawal.event.value) == (breach.event.column, breach.event.value)
    return same and (withdrawal.look, withdrawal.n) > (breach.look, breach.n)
