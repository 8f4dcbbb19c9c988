"""Notices into a message: sentence, numbers, advice, where to look, and for retraining the evidence itself."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final
from urllib.parse import quote

from watcher.answer import standing_json
from watcher.notices import sentences
from watcher.notices.base import PERIODIC, Archive, Attachment, Item, MailTarget, Message, RouteSpec
from watcher.notices.bundle import bundle
from watcher.records import Notice, Standing, Terms
from watcher.text import safe

_GRAVEST: Final = ("breach", "breach-withdrawn", "warning", "support-lost", "stale", "source-failed")
_TITLE: Final = 120

Link = Callable[[str, str], str]
"""(promise, version) -> address of the page about it; both empty: of the board."""


@dataclass(frozen=True, slots=True)
class Writer:
    """Writes messages from what the ledger holds; the same notices give the same sentences however often they are tried."""

    archive: Archive
    link: Link
    unit: Callable[[str, str], str] = lambda _promise, _version: "sample"
    """(promise, version) -> the noun of the configuration."""
    report: Callable[[Notice], tuple[Attachment, ...]] = lambda _notice: ()
    """The files of the report that a notice announces; mail carries them, other routes say where they are."""

    def __call__(self, route: RouteSpec, message_id: str, notices: Sequence[Notice]) -> Message:
        """The message of these notices, all of one look and route."""
        look = notices[0].look
        about = dict.fromkeys((n.promise, n.version) for n in notices)
        known = {name: self._standings(*name) for name in about}
        items = tuple(self._item(notice, known[notice.promise, notice.version]) for notice in notices)
        return Message(
            id=message_id,
            route=route.name,
            type=_type(route, notices[0]),
            source=f"urn:watcher:{quote(self.archive.ledger_id, safe='')}",
            subject=_subject(items, look),
            title=_title(items, look),
            time=max(item.at for item in items),
            look=look,
            head=self.archive.head(),
            items=items,
            standings=tuple(standing_json(s) for standings in known.values() for s in standings if _named(s, items)),
            attachments=self._evidence(route, notices[0]),
        )

    def _standings(self, promise: str, version: str) -> Sequence[Standing]:
        return self.archive.standings(promise, version) if promise else ()

    def _item(self, notice: Notice, standings: Sequence[Standing]) -> Item:
        return (
            self._periodic(notice, standings) if notice.event is None else self._event(notice, notice.event, standings)
        )

    def _periodic(self, notice: Notice, standings: Sequence[Standing]) -> Item:
        terms, whole = self._terms(notice), standings[0] if standings else None
        sentence, advice = sentences.periodic(notice, terms, whole)
        return Item(
            key=notice.key,
            kind=notice.kind,
            promise=notice.promise,
            version=notice.version,
            column="",
            value="",
            at=notice.created,
            sentence=sentence,
            now=sentences.now(whole, terms, self.unit(notice.promise, notice.version)),
            advice=advice,
            where=self.link(notice.promise, notice.version),
        )

    def _event(self, notice: Notice, n: int, standings: Sequence[Standing]) -> Item:
        stored, terms = self.archive.event(notice.look, n), self._terms(notice)
        event = stored.event
        own = next((s for s in standings if (s.column, s.value) == (event.column, event.value)), None)
        return Item(
            key=notice.key,
            kind=event.kind,
            promise=event.promise,
            version=event.version,
            column=event.column,
            value=event.value,
            at=stored.at,
            sentence=sentences.told(event, terms),
            now=sentences.now(own, terms, self.unit(event.promise, event.version)),
            advice=sentences.advice(event, own),
            where=self.link(event.promise, event.version),
            facts=event.facts,
        )

    def _terms(self, notice: Notice) -> Terms | None:
        return self.archive.terms(notice.promise, notice.version) if notice.promise else None

    def _evidence(self, route: RouteSpec, notice: Notice) -> tuple[Attachment, ...]:
        if notice.kind == "report" and isinstance(route.target, MailTarget):
            return self.report(notice)
        if not route.retrain:
            return ()
        archive, promise, version = self.archive, notice.promise, notice.version
        return bundle(
            archive.terms(promise, version),
            archive.standings(promise, version),
            archive.counts(promise, version),
            archive.head(),
        )


def _named(standing: Standing, items: Sequence[Item]) -> bool:
    """The whole, and the slices that the message tells of: a promise may have hundreds of others."""
    own = {(item.promise, item.version, item.column, item.value) for item in items}
    return not standing.column or (standing.promise, standing.version, standing.column, standing.value) in own


def _type(route: RouteSpec, notice: Notice) -> str:
    if route.retrain:
        return "watcher.retraining"
    return f"watcher.{notice.kind}" if notice.kind in PERIODIC else "watcher.notices"


def _subject(items: Sequence[Item], look: int) -> str:
    about = {(item.promise, item.version) for item in items}
    if len(about) == 1 and items[0].promise:
        return f"{items[0].promise}/{items[0].version}"
    return f"look/{look}"


def _title(items: Sequence[Item], look: int) -> str:
    first = min(items, key=lambda item: _GRAVEST.index(item.kind) if item.kind in _GRAVEST else len(_GRAVEST))
    about = safe(first.promise or "watcher", 40)
    where = f" ({safe(first.column, 20)} = {safe(first.value, 20)})" if first.column else ""
    more = f" and {len(items) - 1} more" if len(items) > 1 else ""
    return safe(f"{about}: {first.kind}{where}{more} [look {look}]", _TITLE)
