"""Promises as the configuration has them, matched with the terms that the ledger froze."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from watcher.book import first_cells, next_sealing
from watcher.errors import TermsChanged
from watcher.ledger.store import Ledger
from watcher.ledger.terms import canonical_terms
from watcher.records import (
    Cell,
    Question,
    StoredTerm,
    Terms,
)


@dataclass(frozen=True, slots=True)
class Evidence:
    """The hold-out sample behind a tolerance."""

    labels: int
    errors: int
    models: int = 1
    """Among how many models, fixed beforehand, the released one was chosen on it."""


@dataclass(frozen=True, slots=True)
class Watched:
    """A promise as the configuration has it now."""

    terms: Terms
    stale_after: int
    uncertified: bool = False
    retired: bool = False
    evidence: Evidence | None = None


@dataclass(frozen=True, slots=True)
class Known:
    """A promise version as the ledger has it before this look."""

    watched: Watched
    stored: StoredTerm | None
    cells: tuple[Cell, ...]
    unlisted: bool = False
    supersedes: StoredTerm | None = None

    @property
    def sealed_until(self) -> int:
        """End of the newest sealed bucket; `released` while there is none."""
        return self.stored.sealed_until if self.stored else self.watched.terms.released


def quiet_until(ledger: Ledger, source: str, watched: Sequence[Watched], has_future: bool) -> int:
    """The time (epoch seconds) before which a look at unchanged files could find nothing new; 0: look anyway.

    That is when the next bucket is due to be sealed or a promise grows stale, whichever is first.
    """
    known = recognise(ledger, source, watched)
    if has_future or any(each.stored is None or each.watched.retired for each in known):
        return 0
    moments = []
    for each in known:
        terms = each.watched.terms
        whole = next((s for s in ledger.standings(promise=terms.promise, version=terms.version) if not s.column), None)
        if whole is None:
            return 0
        moments.append(next_sealing(terms, each.sealed_until))
        newest = terms.released if whole.newest_label is None else int(whole.newest_label.timestamp())
        if "stale" not in whole.flags:
            moments.append(newest + each.watched.stale_after + 1)
    return min(moments, default=0)


def recognise(ledger: Ledger, source: str, watched: Sequence[Watched]) -> list[Known]:
    """Match the configuration with the frozen terms of a source. Raises TermsChanged."""
    stored = {(term.terms.promise, term.terms.version): term for term in ledger.terms(open_only=False)}
    known: list[Known] = []
    taken = set()
    for each in watched:
        name = (each.terms.promise, each.terms.version)
        found = stored.get(name)
        if found is not None:
            refuse_changes(found.terms, each.terms)
            taken.add(name)
            if found.closed_by is None and not each.retired:
                known.append(Known(each, found, tuple(ledger.cells(found.id))))
            continue
        if each.retired:
            continue
        older = [t for t in stored.values() if t.terms.promise == each.terms.promise and t.closed_by is None]
        older = [
            t
            for t in older
            if (t.terms.promise, t.terms.version) not in {(w.terms.promise, w.terms.version) for w in watched}
        ]
        known.append(Known(each, None, first_cells(each.terms), supersedes=older[0] if older else None))
    replaced = {known_one.supersedes.id for known_one in known if known_one.supersedes}
    for name, term in stored.items():
        if name in taken or term.closed_by is not None or term.terms.source != source or term.id in replaced:
            continue
        kept = Watched(term.terms, max(7 * 86400, 2 * term.terms.label_lag))
        known.append(Known(kept, term, tuple(ledger.cells(term.id)), unlisted=True))
    return known


def refuse_changes(frozen: Terms, wanted: Terms) -> None:
    """Raise TermsChanged for the first term that differs."""
    if canonical_terms(frozen) == canonical_terms(wanted):
        return
    for name in Terms.__dataclass_fields__:
        before, after = getattr(frozen, name), getattr(wanted, name)
        if before != after:
            raise TermsChanged(wanted.promise, wanted.version, name, _shown(before), _shown(after))


def _shown(value: Any) -> str:
    if isinstance(value, tuple):
        return "[" + ", ".join(map(_shown, value)) + "]"
    if hasattr(value, "__dataclass_fields__"):
        pairs = ((name, getattr(value, name)) for name in value.__dataclass_fields__)
        return "{" + ", ".join(f"{name} = {_shown(part)}" for name, part in pairs if part is not None) + "}"
    return repr(value)


def question(terms: Terms, open_from: int, now: int, *, at_given: bool = False, slice_limit: int = 200) -> Question:
    """What a source is asked about one promise whose buckets before `open_from` are sealed."""
    return Question(
        promise=terms.promise,
        version=terms.version,
        columns=terms.columns,
        time_format=terms.time_format,
        source_time_zone=terms.source_time_zone,
        where=terms.where,
        classes=terms.classes,
        positive=terms.positive,
        measure=terms.measure,
        slices=tuple(each.column for each in terms.slices),
        weight_levels=terms.weight_levels,
        n_max=terms.n_max,
        cluster_span=terms.cluster_span,
        labelling_probabilities=terms.labelling_probabilities,
        time_zone=terms.time_zone,
        bucket=terms.bucket,
        released=terms.released,
        open_from=open_from,
        label_lag=terms.label_lag,
        now=now,
        at_given=at_given,
        slice_limit=slice_limit,
    )
