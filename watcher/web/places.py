"""Addresses of promises and slices, whatever their names hold."""

from __future__ import annotations

import hashlib
from urllib.parse import quote, unquote


def segment(name: str) -> str:
    """A name as one segment of an address.

    It is escaped twice, because servers undo one layer before they look for slashes; dots alone would be taken for a way up.
    """
    once = quote(name, safe="", errors="surrogatepass")
    if not once.strip("."):
        once = once.replace(".", "%2E")
    return quote(once, safe="")


def from_segment(text: str) -> str:
    """The name, given the segment as the router hands it over (one layer already undone)."""
    return unquote(text, errors="surrogatepass")


def promise_path(name: str, version: str) -> str:
    """The page of a promise version."""
    return f"/promises/{segment(name)}/{segment(version)}"


def slice_id(column: str, value: str) -> str:
    """A short name for a slice that holds nothing of its text."""
    return hashlib.sha256(f"{column}\0{value}".encode("utf-8", "surrogatepass")).hexdigest()[:16]


def slice_path(name: str, version: str, column: str, value: str) -> str:
    """The page of a slice."""
    return f"{promise_path(name, version)}/slices/{slice_id(column, value)}"
