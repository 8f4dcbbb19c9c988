"""What a retraining receiver answered: read from a response body or a program's output, never trusted further."""

from __future__ import annotations

import json
from typing import Final, Literal

from watcher.text import safe

_EXCERPT: Final = 200
_REFERENCE: Final = 80
"""Characters of a reference that are kept."""

Status = Literal["accepted", "refused"]


def read_answer(payload: bytes) -> tuple[Status | None, str | None]:
    """(status, reference) of a JSON object `{"status": "accepted"|"refused", "reference": ...}`; None for what is not there.

    Anything else (no JSON, another shape, other words) is no answer and no error: receivers need not answer.
    """
    try:
        told = json.loads(payload)
    except (ValueError, RecursionError):
        return None, None
    if not isinstance(told, dict):
        return None, None
    status, reference = told.get("status"), told.get("reference")
    kept = safe(str(reference), _REFERENCE) if isinstance(reference, str | int) and reference != "" else None
    return (status if status in ("accepted", "refused") else None), kept


def excerpt(text: bytes | str) -> str:
    """The beginning of what a receiver said, on one safe line."""
    shown = text.decode("utf-8", "replace") if isinstance(text, bytes) else text
    return safe(shown.strip(), _EXCERPT)
