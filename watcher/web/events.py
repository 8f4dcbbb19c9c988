"""Events as pages list them, and the page of all events."""

# No postponed annotations here: the routes' parameters name objects that live inside `router`.

from collections.abc import Mapping, Sequence
from typing import Annotated, Any, Final

from fastapi import APIRouter, Depends, Query, Request
from starlette.responses import Response

from watcher import wording
from watcher.ledger.store import Ledger
from watcher.records import EVENTS, StoredEvent, Terms
from watcher.web.access import Access, Visitor
from watcher.web.pages import page
from watcher.web.places import promise_path
from watcher.web.problems import Refused
from watcher.web.site import Site

PAGE: Final = 50


def told(ledger: Ledger, found: Sequence[StoredEvent], terms: Terms | None = None) -> list[Mapping[str, Any]]:
    """Events as the pages list them."""
    known = {}
    if terms is None:
        known = {(each.terms.promise, each.terms.version): each.terms for each in ledger.terms(open_only=False)}
    made: list[Mapping[str, Any]] = []
    for each in found:
        of = terms or known.get((each.event.promise, each.event.version))
        number = each.event.facts.get("number")
        made.append(
            {
                "look": each.look,
                "n": each.n,
                "at": each.at,
                "promise": each.event.promise,
                "kind": each.event.kind,
                "sentence": wording.event_sentence(each.event, of),
                "acknowledged_by": each.acknowledged_by,
                "number": number if isinstance(number, int) else None,
                "path": promise_path(each.event.promise, each.event.version) if each.event.promise else None,
            }
        )
    return made


def router(site: Site, access: Access) -> APIRouter:
    """/events."""
    made = APIRouter(include_in_schema=False)

    @made.get("/events")
    def events(
        request: Request,
        visitor: Annotated[Visitor, Depends(access.page_reader)],
        promise: Annotated[str, Query(max_length=80)] = "",
        kind: str = "",
        before: str = "",
    ) -> Response:
        del visitor
        if kind and kind not in EVENTS:
            raise Refused(422, "invalid", f"kind: allowed are {', '.join(EVENTS)}.")
        ledger = site.ledger()
        found = ledger.events(
            promise=promise or None, kinds=[kind] if kind else None, limit=PAGE + 1, before=place(before)
        )
        more = found[PAGE - 1] if len(found) > PAGE else None
        context = {
            "events": told(ledger, found[:PAGE]),
            "promise": promise,
            "kind": kind,
            "kinds": EVENTS,
            "older": f"{more.look}-{more.n}" if more is not None else "",
        }
        return page(request, "events.html", context)

    return made


def place(text: str) -> tuple[int, int] | None:
    """The place of an event written as LOOK-N; empty: None. Raises Refused (422)."""
    if not text:
        return None
    look, _, n = text.partition("-")
    if not all(each.isascii() and each.isdigit() and len(each) <= 15 for each in (look, n)):
        raise Refused(422, "invalid", "before: LOOK-N, the place of an event, is needed.")
    return int(look), int(n)
