"""One look: pull, judge, record. Every collaborator and the time are arguments; nothing is sent from here.

A look reads the newest look number of its source before the pull and commits only if it is unchanged. A look with no new
count, no sealing and no event writes nothing.
"""

from __future__ import annotations

from watcher.look.acknowledging import acknowledge
from watcher.look.entry import Routing, draft_notices
from watcher.look.looking import Outcome, attempt, look
from watcher.look.promises import Evidence, Watched, question, quiet_until, recognise
from watcher.look.refusals import (
    ClockWentBack,
    NothingInCommon,
    OneSided,
    WeakEvidence,
    refuse_one_sided,
    refuse_weak_evidence,
    sealed_counts,
    weak_evidence,
)

__all__ = [
    "ClockWentBack",
    "Evidence",
    "NothingInCommon",
    "OneSided",
    "Outcome",
    "Routing",
    "Watched",
    "WeakEvidence",
    "acknowledge",
    "attempt",
    "draft_notices",
    "look",
    "question",
    "quiet_until",
    "recognise",
    "refuse_one_sided",
    "refuse_weak_evidence",
    "sealed_counts",
    "weak_evidence",
]
