"""The configuration: a TOML file, read into frozen models, every problem named at once.

The only reader of the environment: secrets and urls come from variables or files that the TOML names.
docs/configuration.md documents every key; a test holds it against these models.
"""

from __future__ import annotations

from watcher.settings.promises import EvidenceTable, PromiseTable
from watcher.settings.reading import parse, read
from watcher.settings.routes import DEFAULT_EVENTS, RouteTable
from watcher.settings.tables import (
    ColumnsTable,
    LedgerTable,
    MetricsTable,
    ReportTable,
    SourceTable,
    WebTable,
)
from watcher.settings.values import BUCKETS, duration, seconds
from watcher.settings.whole import Settings

__all__ = [
    "BUCKETS",
    "DEFAULT_EVENTS",
    "ColumnsTable",
    "EvidenceTable",
    "LedgerTable",
    "MetricsTable",
    "PromiseTable",
    "ReportTable",
    "RouteTable",
    "Settings",
    "SourceTable",
    "WebTable",
    "duration",
    "parse",
    "read",
    "seconds",
]
