"""Text that others wrote, made fit for one line of a record, a log or a mail subject."""

from __future__ import annotations

from typing import Final

LINE: Final = 200


def safe(text: str, limit: int = LINE) -> str:
    """The text on one line: control characters in hexadecimal, at most `limit` characters."""
    shown = "".join(c if c.isprintable() else f"\\x{ord(c):02x}" for c in text.strip())
    return shown if len(shown) <= limit else shown[: limit - 1] + "…"
