"""What all promises risk together, and the slices that stand out, with a stated false discovery rate."""

# No postponed annotations here: the routes' parameters name objects that live inside `router`.

from typing import Annotated, Final

import numpy as np
from fastapi import APIRouter, Depends, Request
from starlette.responses import Response

from watcher import wording
from watcher.bounds.multiplicity import e_bh, false_breach_bound
from watcher.web import reading
from watcher.web.access import Access, Visitor
from watcher.web.pages import page
from watcher.web.places import slice_id
from watcher.web.site import Site

_MOST: Final = 200
"""Slices of the list that are shown."""


def router(site: Site, access: Access) -> APIRouter:
    """/risk."""
    made = APIRouter(include_in_schema=False)

    @made.get("/risk")
    def risk(request: Request, visitor: Annotated[Visitor, Depends(access.page_reader)]) -> Response:
        del visitor
        ledger = site.ledger()
        stored = ledger.terms(open_only=False)
        risks = [each.terms.risk for each in stored]
        slices = [each for each in ledger.standings(open_only=True) if each.column]
        listed = e_bh(np.array([each.total for each in slices]), site.fdr) if slices else np.array([], dtype=bool)
        found = reading.by_total([each for each, on in zip(slices, listed, strict=True) if on])
        context = {
            "stored": stored,
            "bound": wording.one_in(false_breach_bound(risks)) if risks else "",
            "three": wording.one_in(min(1.0, 3 * false_breach_bound(risks))) if risks else "",
            "slices": len(slices),
            "listed": [(each, slice_id(each.column, each.value)) for each in found[:_MOST]],
            "count": len(found),
            "fdr": wording.percent(site.fdr),
        }
        return page(request, "risk.html", context)

    return made
