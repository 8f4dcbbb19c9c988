"""The archive of weekly reports: a list, and the files as they were stored."""

# No postponed annotations here: the routes' parameters name objects that live inside `router`.

from collections.abc import Sequence
from itertools import groupby
from typing import Annotated, Final

from fastapi import APIRouter, Depends, Request
from starlette.responses import Response

from watcher.ledger.reports import StoredReport
from watcher.ledger.store import Ledger
from watcher.text import safe
from watcher.web.access import Access, Visitor
from watcher.web.pages import page
from watcher.web.problems import Refused
from watcher.web.security import FILE_POLICY, refusal
from watcher.web.site import Site

TYPES: Final = {
    "html": "text/html; charset=utf-8",
    "csv": "text/csv; charset=utf-8",
    "json": "application/json",
    "pdf": "application/pdf",
}
_PLAIN: Final = "application/octet-stream"


def router(site: Site, access: Access) -> APIRouter:
    """/reports and its files."""
    made = APIRouter(include_in_schema=False)
    reader = Depends(access.page_reader)

    @made.get("/reports")
    def listed(request: Request, visitor: Annotated[Visitor, reader]) -> Response:
        del visitor
        return page(request, "reports.html", {"reports": grouped(site.ledger().reports.listed())})

    @made.get("/reports/{week}/{revision}/{name:path}")
    def file(request: Request, visitor: Annotated[Visitor, reader], week: str, revision: str, name: str) -> Response:
        del visitor
        number = int(revision) if revision.isascii() and revision.isdigit() and len(revision) < 7 else -1
        return stored_file(request, site.ledger(), week, number, name)

    return made


def grouped(reports: Sequence[StoredReport]) -> list[tuple[StoredReport, list[str]]]:
    """One line a report: its first file's facts, and the names of all files."""
    made = []
    for _, each in groupby(reports, key=lambda r: (r.week, r.revision)):
        files = list(each)
        made.append((files[0], [file.name for file in files]))
    return made


def stored_file(request: Request, ledger: Ledger, week: str, revision: int, name: str) -> Response:
    """The bytes of an archived file. Names are compared with the ledger's, no file system is asked. Raises Refused (404)."""
    content = ledger.reports.content(week, revision, name) if revision >= 0 else None
    if content is None:
        refusal(request.scope, "no-such-report", 404)
        raise Refused(404, "no-such-report", "There is no such file in the archive; /reports lists what there is.")
    suffix = name.rpartition(".")[2].lower()
    kind = TYPES.get(suffix, _PLAIN)
    way = "inline" if suffix == "html" else "attachment"
    headers = {
        "Content-Security-Policy": FILE_POLICY,
        "Content-Disposition": f'{way}; filename="{_file_name(name)}"',
    }
    return Response(content, headers=headers, media_type=kind)


def _file_name(name: str) -> str:
    shown = safe(name, 100)
    return "".join(c if c.isascii() and (c.isalnum() or c in "._- ") else "_" for c in shown)
