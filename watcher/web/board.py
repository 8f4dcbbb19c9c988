"""The pages that say where promises stand: overview, promise, slice."""

# No postponed annotations here: the routes' parameters name objects that live inside `router`.

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Annotated, Any, Final

from fastapi import APIRouter, Depends, Query, Request
from markupsafe import Markup
from starlette.responses import RedirectResponse, Response

from watcher import wording
from watcher.ledger.overview import PromiseOverview
from watcher.ledger.store import Ledger
from watcher.records import Standing, StoredTerm, Terms
from watcher.text import safe
from watcher.web import figures, plain, reading
from watcher.web.access import Access, Visitor
from watcher.web.charts import Gallery
from watcher.web.events import told
from watcher.web.forms import Form
from watcher.web.pages import page
from watcher.web.places import from_segment, promise_path, slice_id
from watcher.web.problems import Refused
from watcher.web.reading import Board
from watcher.web.site import Site

TOLD: Final = 6
"""Up to so many promises are told in full on the overview."""
_RANK: Final = {"breached": 0, "undecided": 2, "supported": 3}


@dataclass(frozen=True, slots=True)
class Row:
    """One promise in the overview."""

    whole: Standing
    terms: Terms
    headline: str
    broken: tuple[str, ...]
    warned: tuple[str, ...]
    flags: tuple[str, ...]
    spark: Markup
    path: str
    rank: int
    state: str
    """Of the whole, or "broken in slices" when only slices are."""


def row_of(found: PromiseOverview) -> Row:
    """A promise as the overview shows it."""
    whole, terms = found.whole, found.stored.terms
    warned = bool(found.warned) or "warning" in whole.flags
    state = plain.STATES[whole.state]
    rank = _RANK[whole.state]
    if found.broken and whole.state != "breached":
        state, rank = "broken in part", 1
    elif rank > 1 and (warned or "stale" in whole.flags):
        rank = 1
    return Row(
        whole=whole,
        terms=terms,
        headline=_headline(whole, terms, in_part=rank == 1 and bool(found.broken)),
        broken=tuple(_cell(*key) for key in found.broken),
        warned=tuple(_cell(*key) for key in found.warned),
        flags=tuple(plain.FLAGS[flag] for flag in whole.flags),
        spark=reading.spark(found),
        path=promise_path(terms.promise, terms.version),
        rank=rank,
        state=state,
    )


def _headline(whole: Standing, terms: Terms, *, in_part: bool) -> str:
    """The state in a few words, as a sentence."""
    text = ("as a whole " if in_part else "") + wording.headline(whole, terms)
    return text[0].upper() + text[1:] + "."


def _cell(column: str, value: str) -> str:
    return f"{safe(column, 40)} = {safe(value, 40) or '(empty)'}"


@dataclass(frozen=True, slots=True)
class _Parts:
    """What the handlers share."""

    site: Site
    access: Access
    board: Board
    gallery: Gallery

    def unit(self, terms: Terms) -> str:
        return self.site.units().get((terms.promise, terms.version), "sample")


def router(site: Site, access: Access, board: Board, gallery: Gallery) -> APIRouter:
    """The pages of this group."""
    made = APIRouter(include_in_schema=False)
    parts = _Parts(site, access, board, gallery)
    reader = Depends(access.page_reader)

    @made.get("/")
    def overview(
        request: Request,
        visitor: Annotated[Visitor, reader],
        q: Annotated[str, Query(max_length=80)] = "",
        state: str = "",
    ) -> Response:
        del visitor
        ledger = site.ledger()
        head, found = board.read(ledger)
        rows = sorted(
            (row_of(each) for each in found), key=lambda row: (row.rank, row.terms.promise, row.terms.version)
        )
        shown = [row for row in rows if _wanted(row, q, state)]
        counts: dict[str, int] = {}
        for row in rows:
            counts[row.state] = counts.get(row.state, 0) + 1
        context = {
            "rows": shown,
            "all": len(rows),
            "counts": counts,
            "q": q,
            "chosen": state,
            "head": head,
            "looked": reading.at(ledger.newest_at()),
            "failed": [each for each in ledger.source_states() if each.failures],
            "told": [_told(parts, ledger, each) for each in found] if len(found) <= TOLD else [],
            "events": told(ledger, ledger.events(limit=8)),
        }
        return page(request, "overview.html", context)

    @made.get("/promises/{name}/{version}")
    def promise(request: Request, visitor: Annotated[Visitor, reader], name: str, version: str) -> Response:
        ledger = site.ledger()
        stored = reading.find_term(ledger, from_segment(name), from_segment(version))
        return page(request, "promise.html", _promise(parts, ledger, stored, visitor))

    @made.get("/promises/{name}/{version}/slices/{cell}")
    def one_slice(
        request: Request, visitor: Annotated[Visitor, reader], name: str, version: str, cell: str
    ) -> Response:
        ledger = site.ledger()
        stored = reading.find_term(ledger, from_segment(name), from_segment(version))
        return page(request, "slice.html", _slice(parts, ledger, stored, cell, visitor))

    @made.post("/promises/{name}/{version}/acknowledge")
    def acknowledge(
        request: Request, visitor: Annotated[Visitor, Depends(access.actor)], form: Form, name: str, version: str
    ) -> Response:
        del request
        promise_name, version_name = from_segment(name), from_segment(version)
        reading.find_term(site.ledger(), promise_name, version_name)
        number, why = form.get("breach", ""), form.get("why", "").strip()
        if not (number.isascii() and number.isdigit() and len(number) < 10):
            raise Refused(422, "invalid", "breach: the number of a breach is needed.")
        if not 1 <= len(why) <= 500:
            raise Refused(422, "invalid", "why: say in 1 to 500 characters what was decided, or what is being done.")
        access.acknowledge(visitor, promise_name, version_name, int(number), why)
        return RedirectResponse(promise_path(promise_name, version_name) + "#events", 303)

    return made


def _wanted(row: Row, q: str, state: str) -> bool:
    return (not q or q.lower() in row.terms.promise.lower()) and (not state or state == row.state)


def _told(parts: _Parts, ledger: Ledger, found: PromiseOverview) -> Mapping[str, Any]:
    """A promise in full, for an overview of few."""
    terms = found.stored.terms
    rows = reading.history(ledger, terms, ("", ""))
    return {
        "terms": terms,
        "path": promise_path(terms.promise, terms.version),
        "sentence": wording.sentence(found.whole, terms, parts.unit(terms)),
        "flags": wording.flag_sentences(found.whole, terms),
        "broken": [(_cell(*key), slice_id(*key)) for key in found.broken],
        "figure": figures.bounds(parts.gallery, found.stored, ("", ""), rows),
    }


def _promise(parts: _Parts, ledger: Ledger, stored: StoredTerm, visitor: Visitor) -> Mapping[str, Any]:
    terms = stored.terms
    standings = ledger.standings(promise=terms.promise, version=terms.version)
    whole = next((each for each in standings if not each.column), None)
    if whole is None:
        raise Refused(404, "nothing-yet", "This promise has no verdict yet.")
    rows = reading.history(ledger, terms, ("", ""))
    slices = reading.by_total([each for each in standings if each.column])
    rejected, _ = ledger.rejects(terms.promise)
    unit = parts.unit(terms)
    return {
        **_common(stored, whole, unit),
        "figures": figures.figures(parts.gallery, ledger, stored, ("", ""), rows),
        "slices": [(each, slice_id(each.column, each.value)) for each in slices],
        "multiples": figures.multiples(parts.gallery, ledger, stored, slices) if slices else None,
        "small": figures.SMALL,
        "events": told(ledger, reading.events_of(ledger, terms), terms),
        "may_act": visitor.acts,
        "rejected": rejected,
        "cells": plain.parts(ledger.cells(stored.id), terms, {(s.column, s.value): s.threshold for s in standings}),
        "budgets": plain.budget_rows(terms),
        "budget_sentence": wording.budgets(terms),
        "term_rows": plain.term_rows(terms),
        "steps": _steps(whole, slices, terms),
        "in_part": whole.state != "breached" and any(each.state == "breached" for each in slices),
        "others": [
            (each.terms.version, promise_path(each.terms.promise, each.terms.version))
            for each in ledger.terms(open_only=False)
            if each.terms.promise == terms.promise and each.terms.version != terms.version
        ],
    }


def _steps(whole: Standing, slices: Sequence[Standing], terms: Terms) -> list[str]:
    steps: dict[str, None] = {}
    for each in (whole, *(s for s in slices if s.state == "breached")):
        for step in wording.next_steps(each, terms):
            steps.setdefault(step)
    return list(steps)


def _common(stored: StoredTerm, standing: Standing, unit: str) -> dict[str, Any]:
    terms = stored.terms
    return {
        "terms": terms,
        "stored": stored,
        "standing": standing,
        "path": promise_path(terms.promise, terms.version),
        "sentence": wording.sentence(standing, terms, unit),
        "flags": wording.flag_sentences(standing, terms),
        "diagnostics": plain.diagnostics(standing, terms, unit),
        "cautions": wording.CAUTIONS,
        "method": wording.method(terms),
        "unit": unit,
    }


def _slice(parts: _Parts, ledger: Ledger, stored: StoredTerm, cell_id: str, visitor: Visitor) -> Mapping[str, Any]:
    terms = stored.terms
    cell = reading.find_cell(ledger.cells(stored.id), cell_id)
    rows = reading.history(ledger, terms, cell.key)
    if not rows:
        raise Refused(404, "nothing-yet", "This slice has no verdict yet.")
    standing = rows[-1].standing
    return {
        **_common(stored, standing, parts.unit(terms)),
        "cell": _cell(cell.column, cell.value),
        "figures": figures.figures(parts.gallery, ledger, stored, cell.key, rows),
        "events": told(ledger, reading.events_of(ledger, terms, 400, cell.key), terms),
        "may_act": visitor.acts,
        "cells": plain.parts([cell], terms, {cell.key: standing.threshold}),
        "steps": list(wording.next_steps(standing, terms)),
        "budget_sentence": wording.budgets(terms),
    }
