"""The JSON API, version 1."""

# No postponed annotations here: the routes' parameters name objects that live inside `router`.

import json
import math
from collections.abc import Mapping
from datetime import date
from typing import Annotated, Any, Final, Literal
from urllib.parse import quote, urlencode

from fastapi import APIRouter, Depends, FastAPI, Path, Query, Request, Security
from starlette.responses import JSONResponse, Response

from watcher import wording
from watcher.answer import event_json, rfc3339, standing_json
from watcher.ledger.store import Ledger
from watcher.ledger.terms import canonical_terms
from watcher.records import EVENTS, Cell, Standing, StoredTerm
from watcher.report import charts
from watcher.web import reading, schema
from watcher.web.access import BEARER, Access, Visitor
from watcher.web.events import place
from watcher.web.places import from_segment
from watcher.web.problems import MEDIA_TYPE, Refused
from watcher.web.reading import Board
from watcher.web.reports import grouped, stored_file
from watcher.web.site import Site
from watcher.web.tables import csv_answer

Form = Literal["json", "csv"]
Name = Annotated[str, Path(description="A slash in a name is written %252F, a percent sign %2525.")]
SliceId = Annotated[str, Query(alias="slice", max_length=16, description="Id of a slice; the whole without it.")]
_KINDS: Final = f"^({'|'.join(EVENTS)})?$"
_TEXT_CSV: Final[dict[str, Any]] = {"text/csv": {"schema": {"type": "string"}}}


def _problems(*statuses: int) -> dict[int | str, dict[str, Any]]:
    every = (400, 401, 403, 413, 421, 422, 429, 500, 503, *statuses)
    body = {"content": {MEDIA_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}}}
    return {status: {"description": "Problem", **body} for status in sorted(every)}


def _csv_too() -> dict[int | str, dict[str, Any]]:
    return {200: {"description": "JSON, or CSV with format=csv", "content": _TEXT_CSV}}


def router(app: FastAPI, site: Site, access: Access, board: Board) -> APIRouter:
    """Everything below /api/v1."""
    made = APIRouter(dependencies=[Security(BEARER)], responses=_problems(404, 405))
    reader = Depends(access.reader)

    @made.get("/openapi.json", include_in_schema=False)
    def document(visitor: Annotated[Visitor, reader]) -> Response:
        del visitor
        return JSONResponse(openapi(app))

    _standing_routes(made, site, access, board)
    _history_routes(made, site, access)
    _happening_routes(made, site, access)
    _archive_routes(made, site, access)
    _acting_routes(made, site, access)
    return made


def _standing_routes(made: APIRouter, site: Site, access: Access, board: Board) -> None:
    """Where promises stand."""
    reader = Depends(access.reader)

    @made.get("/promises", response_model=schema.Promises, responses=_csv_too())
    def promises(
        visitor: Annotated[Visitor, reader],
        state: Literal["breached", "supported", "undecided"] | None = None,
        format: Form = "json",  # noqa: A002 - the name in the address
    ) -> Any:
        """Every open promise, as a whole; precomputed by the newest look."""
        del visitor
        ledger = site.ledger()
        head, found = board.read(ledger)
        rows = [standing(each.whole) for each in found if state in (None, each.whole.state)]
        if format == "csv":
            return csv_answer(rows, "promises")
        return {"at": rfc3339(reading.at(ledger.newest_at())), "look": head.look, "head": head.digest, "promises": rows}

    @made.get("/promises/{name}/{version}", response_model=schema.Promise, responses=_csv_too())
    def promise(visitor: Annotated[Visitor, reader], name: Name, version: Name, format: Form = "json") -> Any:  # noqa: A002
        """One promise version with its slices and its frozen terms; the CSV holds the whole and the slices."""
        del visitor
        ledger, stored = _stored(site, name, version)
        found = ledger.standings(promise=stored.terms.promise, version=stored.terms.version)
        rows = [standing(each) for each in found]
        if format == "csv":
            return csv_answer(rows, "promise")
        whole = next((each for each in found if not each.column), None)
        if whole is None:
            raise Refused(404, "nothing-yet", "This promise has no verdict yet.")
        head, unit = ledger.head(), site.units().get((whole.promise, whole.version), "sample")
        return {
            "at": rfc3339(reading.at(ledger.newest_at())),
            "look": head.look,
            "head": head.digest,
            "sentence": wording.sentence(whole, stored.terms, unit),
            "flags": list(wording.flag_sentences(whole, stored.terms)),
            "terms": json.loads(canonical_terms(stored.terms)),
            "whole": standing(whole),
            "slices": [row for row in rows if row["slice"] is not None],
        }


def _history_routes(made: APIRouter, site: Site, access: Access) -> None:
    """How they came there, by day."""
    reader = Depends(access.reader)

    @made.get("/promises/{name}/{version}/history", response_model=schema.History, responses=_csv_too())
    def history(
        request: Request,
        visitor: Annotated[Visitor, reader],
        name: Name,
        version: Name,
        slice_: SliceId = "",
        before: date | None = None,
        limit: Annotated[int, Query(ge=1, le=1000)] = 100,
        format: Form = "json",  # noqa: A002
    ) -> Any:
        """The last verdict of each UTC day, newest first, before a day."""
        del visitor
        ledger, stored = _stored(site, name, version)
        cell = _cell(ledger, stored, slice_)
        terms = stored.terms
        found = ledger.history(terms.promise, terms.version, *cell.key, before=before, limit=limit + 1)
        days = [{"day": day.isoformat(), "look": look, "standing": standing(s)} for day, look, s in found[:limit]]
        if format == "csv":
            return csv_answer(days, "history")
        more = {"before": days[-1]["day"], "limit": limit} if len(found) > limit else None
        return {"days": days, "next": _next(request, more, slice=slice_)}

    @made.get("/promises/{name}/{version}/counts", response_model=schema.DayCounts, responses=_csv_too())
    def counts(
        visitor: Annotated[Visitor, reader],
        name: Name,
        version: Name,
        slice_: SliceId = "",
        format: Form = "json",  # noqa: A002
    ) -> Any:
        """Predictions and labels by local day, the last 400 days."""
        del visitor
        ledger, stored = _stored(site, name, version)
        cell = _cell(ledger, stored, slice_)
        rows = reading.history(ledger, stored.terms, cell.key)
        days = [
            {
                "day": d.day.isoformat(),
                "predictions": d.predictions,
                "labels": d.labels,
                "late": d.late,
                "sealed": d.sealed,
            }
            for d in reading.day_counts(ledger, stored, cell.key, rows)
        ]
        return csv_answer(days, "counts") if format == "csv" else {"days": days}

    @made.get("/promises/{name}/{version}/charts/{chart}", response_model=dict[str, Any])
    def chart(
        visitor: Annotated[Visitor, reader],
        name: Name,
        version: Name,
        chart: Literal["bounds", "total", "labels"],
        slice_: SliceId = "",
        scheme: charts.Scheme = "light",
    ) -> Any:
        """The specification of a chart (Vega-Lite), as the pages draw it."""
        del visitor
        ledger, stored = _stored(site, name, version)
        cell = _cell(ledger, stored, slice_)
        rows = reading.history(ledger, stored.terms, cell.key)
        drawn: dict[str, Any] = {"width": "container", "scheme": scheme, "tips": True}
        if chart == "labels":
            return charts.labels(reading.day_counts(ledger, stored, cell.key, rows), **drawn)
        return (charts.bounds if chart == "bounds" else charts.total)(rows, stored.terms, **drawn)


def _happening_routes(made: APIRouter, site: Site, access: Access) -> None:
    """What happened."""
    reader = Depends(access.reader)

    @made.get("/events", response_model=schema.Events, responses=_csv_too())
    def events(
        request: Request,
        visitor: Annotated[Visitor, reader],
        promise: Annotated[str, Query(max_length=80)] = "",
        kind: Annotated[str, Query(pattern=_KINDS)] = "",
        before: Annotated[
            str, Query(pattern=r"^([0-9]{1,15}-[0-9]{1,15})?$", description="LOOK-N: older than this event.")
        ] = "",
        limit: Annotated[int, Query(ge=1, le=1000)] = 100,
        format: Form = "json",  # noqa: A002
    ) -> Any:
        """Events, newest first."""
        del visitor
        ledger = site.ledger()
        kinds = [kind] if kind else None
        found = ledger.events(promise=promise or None, kinds=kinds, before=place(before), limit=limit + 1)
        known = {(each.terms.promise, each.terms.version): each.terms for each in ledger.terms(open_only=False)}
        rows = [
            {
                **_finite(event_json(each)),
                "sentence": wording.event_sentence(each.event, known.get((each.event.promise, each.event.version))),
            }
            for each in found[:limit]
        ]
        if format == "csv":
            return csv_answer(rows, "events")
        more = {"before": f"{rows[-1]['look']}-{rows[-1]['n']}", "limit": limit} if len(found) > limit else None
        return {"events": rows, "next": _next(request, more, promise=promise, kind=kind)}

    @made.get("/sources", response_model=schema.Sources, responses=_csv_too())
    def sources(visitor: Annotated[Visitor, reader], format: Form = "json") -> Any:  # noqa: A002
        """How the pulls of every source went."""
        del visitor
        rows = [
            {
                "source": each.source,
                "last_try": rfc3339(each.last_try),
                "last_success": rfc3339(each.last_success),
                "failures": each.failures,
                "reason": each.reason,
                "failing_since": rfc3339(each.failing_since),
            }
            for each in site.ledger().source_states()
        ]
        return csv_answer(rows, "sources") if format == "csv" else {"sources": rows}


def _archive_routes(made: APIRouter, site: Site, access: Access) -> None:
    """Weekly reports."""
    reader = Depends(access.reader)

    @made.get("/reports", response_model=schema.Reports, responses=_csv_too())
    def reports(visitor: Annotated[Visitor, reader], format: Form = "json") -> Any:  # noqa: A002
        """The archive of weekly reports, newest first."""
        del visitor
        rows = [
            {
                "week": each.week,
                "revision": each.revision,
                "final": each.final,
                "look": each.head.look,
                "head": each.head.digest,
                "created": rfc3339(each.created),
                "files": names,
            }
            for each, names in grouped(site.ledger().reports.listed())
        ]
        return csv_answer(rows, "reports") if format == "csv" else {"reports": rows}

    @made.get(
        "/reports/{week}/{revision}/{file}",
        response_class=Response,
        responses={200: {"description": "The file as it was archived", "content": {"*/*": {}}}},
    )
    def report_file(
        request: Request,
        visitor: Annotated[Visitor, reader],
        week: str,
        revision: Annotated[int, Path(ge=0, lt=10**6)],
        file: str,
    ) -> Response:
        """One file of an archived report."""
        del visitor
        return stored_file(request, site.ledger(), week, revision, file)


def _acting_routes(made: APIRouter, site: Site, access: Access) -> None:
    """What needs the role act."""
    actor = Depends(access.actor)

    @made.get("/rejects", response_model=schema.Rejects, responses=_csv_too())
    def rejects(
        visitor: Annotated[Visitor, actor],
        promise: Annotated[str, Query(min_length=1, max_length=80)],
        format: Form = "json",  # noqa: A002
    ) -> Any:
        """Rows that the newest look could not use; needs the role act, because raw rows may hold personal data."""
        del visitor
        ledger = site.ledger()
        if all(each.terms.promise != promise for each in ledger.terms(open_only=False)):
            raise Refused(404, "no-such-promise", "There is no promise of this name in the ledger.")
        found, samples = ledger.rejects(promise)
        rows = [
            {"reason": r.reason, "file": r.file, "line": r.line, "id": r.id, "values": dict(r.values)} for r in samples
        ]
        return csv_answer(rows, "rejects") if format == "csv" else {"counts": found, "samples": rows}

    @made.post("/acknowledgements", response_model=schema.Acknowledged, status_code=201, responses=_problems(404, 409))
    def acknowledge(visitor: Annotated[Visitor, actor], body: schema.Acknowledge) -> Any:
        """Acknowledge a breach; recorded with the name of the token. Needs the role act."""
        reading.find_term(site.ledger(), body.promise, body.version)
        head = access.acknowledge(visitor, body.promise, body.version, body.breach, body.why.strip())
        return {"look": head.look, "head": head.digest, "who": visitor.name}


def openapi(app: FastAPI) -> dict[str, Any]:
    """The OpenAPI document; the scheme of problems is in it although no handler returns one."""
    document = app.openapi()
    document["components"]["schemas"]["Problem"] = schema.Problem.model_json_schema(
        ref_template="#/components/schemas/{model}"
    )
    document["components"]["schemas"]["ProblemError"] = schema.ProblemError.model_json_schema()
    document["components"]["schemas"]["Problem"].pop("$defs", None)
    return document


def standing(found: Standing) -> dict[str, Any]:
    """The JSON of a look for one cell; infinities are null."""
    return dict(_finite(standing_json(found)))


def _finite(value: Any) -> Any:
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {key: _finite(inner) for key, inner in value.items()}
    return [_finite(inner) for inner in value] if isinstance(value, list) else value


def _stored(site: Site, name: str, version: str) -> tuple[Ledger, StoredTerm]:
    ledger = site.ledger()
    return ledger, reading.find_term(ledger, from_segment(name), from_segment(version))


def _cell(ledger: Ledger, stored: StoredTerm, name: str) -> Cell:
    cells = ledger.cells(stored.id)
    return reading.find_cell(cells, name) if name else cells[0]


def _next(request: Request, more: Mapping[str, Any] | None, **kept: str) -> str | None:
    if more is None:
        return None
    query = {**{key: value for key, value in kept.items() if value}, **more}
    return f"{quote(request.scope['path'])}?{urlencode(query)}"
