"""Signing in and out: a token becomes a session in a cookie that scripts cannot read."""

# No postponed annotations here: the routes' parameters name objects that live inside `router`.

from typing import Annotated

from fastapi import APIRouter, Depends, Request
from starlette.responses import RedirectResponse, Response

from watcher.web.access import Access, Visitor
from watcher.web.forms import Form
from watcher.web.pages import page
from watcher.web.problems import Refused


def router(access: Access) -> APIRouter:
    """/sign-in and /sign-out."""
    made = APIRouter(include_in_schema=False)

    @made.get("/sign-in")
    def ask(request: Request, next: str = "/") -> Response:  # noqa: A002 - the name in the address
        return page(request, "sign_in.html", {"next": local(next), "told": ""})

    @made.post("/sign-in")
    def sign_in(request: Request, form: Form) -> Response:
        goal = local(form.get("next", "/"))
        response = RedirectResponse(goal, 303)
        try:
            access.sign_in(request, form.get("token", "").strip(), response)
        except Refused as refused:
            shown = page(request, "sign_in.html", {"next": goal, "told": refused.detail}, refused.status_code)
            shown.headers.update(refused.headers or {})
            return shown
        return response

    @made.post("/sign-out")
    def sign_out(request: Request, visitor: Annotated[Visitor, Depends(access.anyone)]) -> Response:
        del visitor
        response = RedirectResponse("/sign-in" if request.app.state.site.tokens_required else "/", 303)
        access.sign_out(request, response)
        return response

    return made


def local(goal: str) -> str:
    """Where to go after signing in: a path of this site, never another site."""
    fine = goal.startswith("/") and not goal.startswith(("//", "/\\")) and goal.isprintable()
    return goal if fine else "/"
