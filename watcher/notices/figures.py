"""How many notices of each route ended how: from the ledger's counts, every route and outcome present from the start."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Final

OUTCOMES: Final = ("delivered", "dead", "cancelled")
"""The label values of `watcher_notices_total`; `waiting` is a gauge of its own."""


@dataclass(frozen=True, slots=True)
class Figures:
    """What /metrics shows of the outbox."""

    total: Mapping[tuple[str, str], int]
    """(route, outcome) -> notices: `watcher_notices_total{route,outcome}`."""
    waiting: Mapping[str, int]
    """route -> notices: `watcher_notices_waiting{route}`."""


def figures(counts: Mapping[tuple[str, str], int], routes: Iterable[str]) -> Figures:
    """Counts of the ledger by (route, state), filled with zeros for every configured route.

    A route that left the configuration keeps its series while the ledger knows notices of it.
    """
    names = sorted({*routes, *(route for route, _ in counts)})
    return Figures(
        total={(name, outcome): counts.get((name, outcome), 0) for name in names for outcome in OUTCOMES},
        waiting={name: counts.get((name, "waiting"), 0) for name in names},
    )
