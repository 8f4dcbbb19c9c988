"""Bodies of the board's own forms: plain fields, nothing else."""

from __future__ import annotations

from typing import Annotated
from urllib.parse import parse_qsl

from fastapi import Depends, Request

from watcher.web.problems import Refused

_MOST_FIELDS = 20


async def fields(request: Request) -> dict[str, str]:
    """The fields of a form. Raises Refused for another kind of body."""
    kind = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    if kind != "application/x-www-form-urlencoded":
        raise Refused(415, "wrong-body", "A form of the type application/x-www-form-urlencoded is expected.")
    body = await request.body()
    try:
        pairs = parse_qsl(body.decode("utf-8"), keep_blank_values=True, max_num_fields=_MOST_FIELDS)
    except (UnicodeDecodeError, ValueError):
        raise Refused(400, "wrong-body", "The body is no form.") from None
    return dict(pairs)


Form = Annotated[dict[str, str], Depends(fields)]
