"""Alive, ready, and metrics at their exact addresses."""

from __future__ import annotations

from fastapi import APIRouter, FastAPI
from starlette.requests import Request
from starlette.responses import PlainTextResponse, Response
from starlette.routing import Route
from starlette.types import ASGIApp, Receive, Scope, Send

from watcher.text import safe
from watcher.web.access import Access
from watcher.web.problems import Refused, problem
from watcher.web.site import Site


class Metrics:
    """/metrics behind the same gate as a page. An instance: a plain function would be taken for an endpoint of requests."""

    def __init__(self, app: ASGIApp, access: Access) -> None:
        self._app = app
        self._access = access

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Answer a scrape, or refuse it."""
        from starlette.concurrency import run_in_threadpool

        try:
            await run_in_threadpool(self._access.reader, Request(scope))
        except Refused as refused:
            answer = problem(refused.status_code, refused.reason, refused.detail, headers=refused.headers)
            await answer(scope, receive, send)
            return
        await self._app(scope, receive, send)


def install(app: FastAPI, site: Site, access: Access) -> None:
    """/healthz, /readyz (no token: they say nothing about promises) and /metrics."""
    made = APIRouter(include_in_schema=False)

    @made.get("/healthz")
    def alive() -> Response:
        return PlainTextResponse("alive\n")

    @made.get("/readyz")
    def ready() -> Response:
        fine, told = site.ready()
        return PlainTextResponse(safe(told, 300) + "\n", 200 if fine else 503)

    app.include_router(made)
    if site.metrics is not None:
        app.router.routes.append(Route("/metrics", Metrics(site.metrics, access)))
