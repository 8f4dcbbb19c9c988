"""What an audit found, and what it could not see."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Protocol

from watcher.records import Entry, Event, Head, Standing

MOST = 50
"""Findings told one by one for each table; the rest are counted."""


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing that does not verify."""

    table: str
    key: str
    what: str

    def __str__(self) -> str:
        return f"{self.table} {self.key}: {self.what}"


@dataclass(frozen=True, slots=True)
class Audit:
    """The outcome of an audit."""

    findings: tuple[Finding, ...]
    head: Head
    """As the ledger says it is: keep it elsewhere, and give it to the next audit."""
    looks: int
    rederived: int
    """Looks whose verdicts and events were computed again."""
    other_method: int
    """Looks judged by another method than the present one: their chain was verified, their verdicts were not derived."""
    not_rederived: int
    """Looks that were not computed again for another reason: no replay was given, or an earlier look is damaged."""
    kept_head: bool
    """Whether a head kept elsewhere was compared; without one, a cut tail or a rewritten chain cannot be seen."""

    @property
    def ok(self) -> bool:
        """Whether nothing was found."""
        return not self.findings


@dataclass(frozen=True, slots=True)
class Replayed:
    """What a look says once more."""

    standings: tuple[Standing, ...]
    memories: tuple[Mapping[str, Any], ...]
    """Beside each standing. Keys that end in `_micronats` may differ by 2 from the stored ones, decimal text by 2e-6, all others not at all."""
    events: tuple[Event, ...]


class Replay(Protocol):
    """Derives verdicts again, look after look in the order of the chain, keeping its own state between them."""

    @property
    def method(self) -> int:
        """The number of the method it derives with."""
        ...

    @property
    def derives(self) -> frozenset[str]:
        """The kinds of events it makes; others (acknowledged, source-failed, ...) come from outside."""
        ...

    def look(self, entry: Entry) -> Replayed:
        """Judge an entry that was read back from its sheet: without standings, memories, notices and rejected rows.

        Its events are the recorded ones; counts, sealed, remarks and new terms and cells are complete.
        """
        ...

    def adopt(self, entry: Entry, standings: tuple[Standing, ...], memories: tuple[Mapping[str, Any], ...]) -> None:
        """Take over an entry of another method: its counts, and the recorded standings and memories.

        These are empty when a later look of the same day stands in the verdict table; the entry's events are complete.
        """
        ...


class Findings:
    """Collects findings; a damaged table of 400,000 rows must not print 400,000 lines."""

    def __init__(self) -> None:
        self._found: list[Finding] = []
        self._counts: dict[str, int] = {}

    def add(self, table: str, key: object, what: str) -> None:
        """Note one finding."""
        self._counts[table] = self._counts.get(table, 0) + 1
        if self._counts[table] <= MOST:
            self._found.append(Finding(table, str(key), what))

    def all(self) -> tuple[Finding, ...]:
        """Everything noted, with the number of what was left out."""
        rest = [(table, n - MOST) for table, n in self._counts.items() if n > MOST]
        return (*self._found, *(Finding(table, "...", f"and {n} more") for table, n in rest))
