"""Templates, and the one way in which a page is made of them."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from pathlib import Path
from typing import Any, Final

from fastapi import Request
from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup
from starlette.responses import HTMLResponse

from watcher import wording
from watcher.answer import rfc3339
from watcher.text import safe
from watcher.web.access import NOBODY
from watcher.web.places import promise_path, slice_path
from watcher.web.plain import FLAGS, STATES

FOLDER: Final = Path(__file__).parent / "templates"


def _shown(value: Any) -> Any:
    # A second net under every output: whatever a template forgets, no control character leaves this process.
    return value if isinstance(value, Markup) or not isinstance(value, str) else safe(value, None)


def _time(at: datetime, zone: str = "UTC") -> Markup:
    text = wording.moment(at, zone) + (" UTC" if zone == "UTC" else "")
    return Markup('<time datetime="{}">{}</time>').format(rfc3339(at), text)


def _day(at: datetime, zone: str = "UTC") -> Markup:
    return Markup('<time datetime="{}">{}</time>').format(rfc3339(at), wording.day(at, zone))


def _code(text: str) -> Markup:
    # Sentences quote commands and keys as `watcher explain`.
    pieces = safe(text, None).split("`")
    return Markup("").join(Markup("<code>{}</code>").format(p) if i % 2 else p for i, p in enumerate(pieces))


def _environment() -> Environment:
    made = Environment(
        loader=FileSystemLoader(FOLDER),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        finalize=_shown,
    )
    made.filters["outside"] = safe
    made.filters["time"] = _time
    made.filters["day"] = _day
    made.filters["code"] = _code
    made.globals.update(
        say=wording, states=STATES, flag_names=FLAGS, promise_path=promise_path, slice_path=slice_path, version=""
    )
    return made


ENVIRONMENT: Final = _environment()


def page(request: Request, template: str, context: Mapping[str, Any], status: int = 200) -> HTMLResponse:
    """A page. `context` adds to what every page knows: who is signed in, and the addresses of its files."""
    state = request.app.state
    visitor = getattr(request.state, "visitor", NOBODY)
    known = {
        "visitor": visitor,
        "path": request.url.path,
        "assets": state.assets,
        "tokens_required": state.site.tokens_required,
    }
    return HTMLResponse(ENVIRONMENT.get_template(template).render({**known, **context}), status)
