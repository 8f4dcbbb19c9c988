"""The web app: board, JSON API, metrics and health, behind one gate."""

from __future__ import annotations

from fastapi import FastAPI, Request
from starlette.responses import Response

from watcher.web import api, board, events, health, problems, reports, risk, sign, static_files
from watcher.web.access import Access
from watcher.web.charts import Gallery
from watcher.web.pages import page
from watcher.web.reading import Board
from watcher.web.security import Guard
from watcher.web.site import Site

__all__ = ["Site", "create_app"]


def create_app(site: Site) -> FastAPI:
    """The app over its parts. It opens nothing, starts nothing and reads no clock but `site.clock`."""
    app = FastAPI(
        title="watcher",
        summary="Where promises about classifiers stand: verdicts, history, events, reports.",
        version="1",
        openapi_url=None,
        docs_url=None,
        redoc_url=None,
    )
    files, access, kept, gallery = static_files.Files(), Access(site), Board(), Gallery(site.render)
    app.state.site, app.state.assets = site, files.assets()
    app.include_router(board.router(site, access, kept, gallery))
    app.include_router(events.router(site, access))
    app.include_router(risk.router(site, access))
    app.include_router(reports.router(site, access))
    app.include_router(sign.router(access))
    app.include_router(static_files.router(files))
    app.include_router(api.router(app, site, access, kept), prefix="/api/v1")
    health.install(app, site, access)
    problems.install(app, error_page)
    app.add_middleware(Guard, hosts=site.hosts)
    return app


def error_page(request: Request, status: int, title: str, detail: str) -> Response:
    """What went wrong, for people."""
    return page(request, "error.html", {"status": status, "title": title, "detail": detail}, status)
