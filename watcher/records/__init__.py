"""What travels between the rooms: frozen records, aware datetimes, integers for counts.

Times inside counts and paths are whole seconds since 1970-01-01 UTC (`epoch`); times shown to people are aware datetimes.
"""

from __future__ import annotations

from watcher.records.counting import INTEGERS, REASONS, CellCounts, Counts, Question, RejectedRow, Tally
from watcher.records.keeping import Entry, Notice, NoticeDraft, Remarks, SourceState, StoredEvent, StoredTerm, TermDraft
from watcher.records.standing import (
    EVENTS,
    FLAGS,
    STATES,
    Breach,
    Event,
    Failure,
    Head,
    Interval,
    Recent,
    Standing,
    State,
    Support,
    ToDecide,
)
from watcher.records.terms import Cell, Columns, Counting, Measure, Slice, Terms

__all__ = [
    "EVENTS",
    "FLAGS",
    "INTEGERS",
    "REASONS",
    "STATES",
    "Breach",
    "Cell",
    "CellCounts",
    "Columns",
    "Counting",
    "Counts",
    "Entry",
    "Event",
    "Failure",
    "Head",
    "Interval",
    "Measure",
    "Notice",
    "NoticeDraft",
    "Question",
    "Recent",
    "RejectedRow",
    "Remarks",
    "Slice",
    "SourceState",
    "Standing",
    "State",
    "StoredEvent",
    "StoredTerm",
    "Support",
    "Tally",
    "TermDraft",
    "Terms",
    "ToDecide",
]
