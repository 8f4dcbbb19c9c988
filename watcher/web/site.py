"""Everything the web app needs from the process that serves it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from starlette.types import ASGIApp

from watcher.ledger.store import Ledger
from watcher.records import Head


@dataclass(frozen=True, slots=True)
class Site:
    """The parts that the app is built from; it never assumes that the ledger is there."""

    ledger: Callable[[], Ledger]
    """Opens or returns a handle for reading; may raise WatcherError, which becomes a page or a problem of status 503."""
    clock: Callable[[], datetime]
    units: Callable[[], Mapping[tuple[str, str], str]]
    """(promise, version) -> the noun of its sentences."""
    hosts: tuple[str, ...]
    """Host headers to answer to, besides the loopback names with the bound port; without a port: any port."""
    tokens_required: bool
    """True: every page needs a token (always so off loopback). False: what changes something, and raw rows, need one."""
    acknowledge: Callable[[str, str, int, str, str], Head]
    """(promise, version, breach number, who, why) -> the new head; raises WatcherError."""
    ready: Callable[[], tuple[bool, str]]
    """Whether the service is ready, and what it waits for."""
    metrics: ASGIApp | None = None
    """Served at exactly /metrics."""
    render: Callable[[dict[str, Any]], str] | None = None
    """A chart's spec -> SVG; None: pages come with their tables only."""
    fdr: float = 0.05
    """False discovery rate of the list on the risk page."""
