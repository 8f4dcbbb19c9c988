"""Errors as answers: problem documents (RFC 9457) for programs, a plain page for people."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from http import HTTPStatus
from typing import Any, Final

import structlog
from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from starlette.exceptions import HTTPException
from starlette.responses import JSONResponse, Response

from watcher.errors import LedgerBusy, WatcherError
from watcher.text import safe

MEDIA_TYPE: Final = "application/problem+json"
API: Final = "/api/"
log = structlog.get_logger("watcher.web")
Page = Callable[[Request, int, str, str], Response]
"""(request, status, title, detail) -> an error page."""


class Refused(HTTPException):
    """A request that is refused for a reason with a short code; handlers turn it into a problem or a page."""

    def __init__(self, status: int, reason: str, detail: str, headers: Mapping[str, str] | None = None) -> None:
        super().__init__(status, detail, dict(headers or {}))
        self.reason = reason


def problem(
    status: int,
    reason: str,
    detail: str,
    *,
    headers: Mapping[str, str] | None = None,
    errors: Sequence[Mapping[str, Any]] | None = None,
) -> Response:
    """A problem document. `reason` is a short code that programs may rely on; `detail` is a sentence for people."""
    body: dict[str, Any] = {
        "type": "about:blank" if not reason else f"urn:watcher:problem:{reason}",
        "title": HTTPStatus(status).phrase,
        "status": status,
        "detail": detail,
    }
    if errors:
        body["errors"] = list(errors)
    return JSONResponse(body, status, dict(headers or {}), media_type=MEDIA_TYPE)


def install(app: FastAPI, page: Page) -> None:
    """Let every error of the app be answered: below /api/ with a problem, elsewhere with a page."""

    def answer(
        request: Request, status: int, reason: str, detail: str, headers: Mapping[str, str] | None = None, **more: Any
    ) -> Response:
        if request.url.path.startswith(API):
            return problem(status, reason, detail, headers=headers, **more)
        response = page(request, status, HTTPStatus(status).phrase, detail)
        response.headers.update(headers or {})
        return response

    @app.exception_handler(HTTPException)
    def _http(request: Request, error: HTTPException) -> Response:
        reason = (
            error.reason
            if isinstance(error, Refused)
            else HTTPStatus(error.status_code).phrase.lower().replace(" ", "-")
        )
        return answer(request, error.status_code, reason, str(error.detail), error.headers)

    @app.exception_handler(RequestValidationError)
    def _validation(request: Request, error: RequestValidationError) -> Response:
        found = [
            {"place": ".".join(safe(str(step)) for step in each["loc"]), "message": safe(each["msg"], 300)}
            for each in error.errors()
        ]
        told = "; ".join(f"{each['place']}: {each['message']}" for each in found)
        return answer(request, 422, "invalid", safe(told, 600), errors=found)

    @app.exception_handler(WatcherError)
    def _watcher(request: Request, error: WatcherError) -> Response:
        log.warning("ledger not available", error=type(error).__name__, detail=safe(str(error), 300))
        detail = "The ledger cannot be read at this moment; looks and notices go on by themselves. Try again shortly."
        if isinstance(error, LedgerBusy):
            detail = "The ledger is busy: another process writes it. Try again shortly."
        return answer(request, 503, "ledger-not-available", detail, {"Retry-After": "5"})

    @app.exception_handler(Exception)
    def _any(request: Request, error: Exception) -> Response:
        log.error("request failed", error=type(error).__name__, path=safe(request.url.path, 200))
        return answer(request, 500, "internal", "Something went wrong here; the log says what.")
