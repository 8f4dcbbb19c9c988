"""Where labelled rows come from: sources that count and never judge."""

from __future__ import annotations

import time
from collections.abc import Callable

from watcher.errors import NotAvailable
from watcher.sources.base import Source, SourceSpec, Survey

__all__ = ["Source", "SourceSpec", "Survey", "open_source"]


def open_source(
    spec: SourceSpec, clock: Callable[[], float] = time.time, pulled: Callable[[], None] = lambda: None
) -> Source:
    """Return the source that a configuration describes; nothing is read before the first call.

    `clock` gives seconds since 1970 (it tells how old an unfinished last line is); `pulled` is called between the read and
    the check that nothing changed meanwhile. Raises `NotAvailable` for kinds that are not built yet.
    """
    if spec.kind == "csv":
        from watcher.sources.files import FileSource

        return FileSource(spec, clock, pulled)
    if spec.kind == "database":
        from watcher.sources.database import DatabaseSource

        return DatabaseSource(spec)
    raise NotAvailable(f"source.{spec.name}.kind", spec.kind, "use csv or database")
