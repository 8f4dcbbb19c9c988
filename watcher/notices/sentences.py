"""One event as one plain sentence with its numbers, and what to do next."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from typing import Any, Final

from watcher.notices.outside import safe
from watcher.records import Event, Notice, Standing, Terms

_NAME: Final = 80

ADVICE: Final[Mapping[str, str]] = {
    "breach": "Decide with the accountable people whether the classifier may go on being used; look at the slices; start "
    "retraining or go back to the earlier version; acknowledge with `watcher acknowledge`.",
    "breach-withdrawn": "Corrected labels took the breach back. Nothing needs doing beyond stopping what it had started.",
    "warning": "No breach yet. Label more of the newest samples, so that the evidence decides sooner.",
    "warning-over": "Nothing. The error rate has stayed unremarkable since the warning.",
    "supported": "Nothing. The evidence bears the promise out.",
    "support-lost": "Nothing is broken. More labels decide it; see how many with `watcher explain`.",
    "stale": "Find out why labels no longer arrive: until they do, nothing more can be said about the promise.",
    "labels-resumed": "Nothing. Labels arrive again.",
    "source-failed": "Mend the source, or the way to it; the counts stay as they are and the next look tries again.",
    "source-restored": "Nothing. The source answers again.",
    "rows-rejected": "See which rows with `watcher rejects` and mend them at the source before their bucket is sealed.",
    "evidence-shrank": "Find out why rows or labels vanished from the source; deleted rows are missing evidence.",
    "late-labels": "Labels came after their bucket was sealed and were not counted; if that is usual, label_lag is too short.",
    "clock-went-back": "Set the machine's clock right; no look is made until then.",
    "released": "Nothing. Evidence is counted from the release on.",
    "superseded": "Nothing. The new version is watched with evidence and risk of its own.",
    "acknowledged": "Nothing. The daily reminder has stopped; the breach stands.",
    "heartbeat": "Nothing. If these stop coming, look after the daemon.",
    "reminder": "Acknowledge the breach with `watcher acknowledge`, which stops this reminder and nothing else.",
    "report": "Read the weekly report.",
}
"""What to do next, for every kind of notice."""


def sentence(event: Event, terms: Terms | None, standing: Standing | None) -> str:
    """What happened. `terms` is None for events of a source; `standing` is that of the event's own slice, if it is known."""
    tell = _TOLD.get(event.kind)
    if tell is None or terms is None:
        return _plain(event)
    told = tell(event, terms)
    return told + _now(standing) if event.kind in _WITH_FIGURES else told


def periodic(notice: Notice, terms: Terms | None, standing: Standing | None) -> str:
    """What a heartbeat, a reminder or a report notice says."""
    if notice.kind == "reminder" and terms is not None:
        told = f"The breach number {notice.breach_number} of {_who(terms, '', '')} has not been acknowledged"
        since = (
            ""
            if standing is None or standing.breach is None
            else f"; it was noticed on {_day(standing.breach.noticed)}"
        )
        return f"{told}{since}."
    if notice.kind == "report" and terms is not None:
        return f"The weekly report of {_who(terms, '', '')} is due."
    return f"The daemon is alive; the newest look it has recorded is number {notice.look}."


def rate(value: float) -> str:
    """A fraction as a percentage with three significant digits."""
    return f"{value * 100:.3g}%"


def _breach(event: Event, terms: Terms) -> str:
    facts = event.facts
    counted = f"{facts['window_errors']} errors in {facts['window_labels']} labels" if "window_labels" in facts else ""
    window = f" The likeliest start is {_date(facts['since'])}"
    window += f": {counted} since then." if counted else "."
    return (
        f"{_who(terms, event.column, event.value)} breaks its promise of at most {rate(terms.tolerance)} {_measure(terms)}: "
        f"some window ending {_date(facts['at'])} averaged above {rate(float(facts['lower']))}, "
        f"with a chance of at most {terms.risk:g} that this promise is ever wrongly said to be broken.{window}"
    )


def _withdrawn(event: Event, terms: Terms) -> str:
    return f"The breach of {_who(terms, event.column, event.value)} is withdrawn: corrected labels no longer show it."


def _warning(event: Event, terms: Terms) -> str:
    every = terms.warn_every // 86400
    return (
        f"{_who(terms, event.column, event.value)} shows an early sign of a rise of its {_measure(terms)} above "
        f"{rate(terms.tolerance)}{_until(event)}; such a warning is false once in {every} days on average."
    )


def _warning_over(event: Event, terms: Terms) -> str:
    return f"The warning about {_who(terms, event.column, event.value)} is over."


def _supported(event: Event, terms: Terms) -> str:
    since = f" averaged since {_date(event.facts['since'])}" if "since" in event.facts else ""
    return (
        f"The evidence bears out {_who(terms, event.column, event.value)}: its {_measure(terms)}{since} is at most "
        f"{rate(terms.tolerance)}, with a chance of at most {terms.risk:g} that this is wrong."
    )


def _support_lost(event: Event, terms: Terms) -> str:
    because = " because its labels are stale" if event.facts.get("because") == "stale" else ""
    return (
        f"The evidence no longer bears out {_who(terms, event.column, event.value)}{because}; the promise of at most "
        f"{rate(terms.tolerance)} is neither supported nor broken."
    )


def _stale(event: Event, terms: Terms) -> str:
    newest = event.facts.get("newest_label")
    told = f"its newest label is of {_date(newest)}" if newest else "no label has arrived since its release"
    return f"{_who(terms, event.column, event.value)} is stale: {told}."


def _shrank(event: Event, terms: Terms) -> str:
    predictions, labels = event.facts.get("predictions", "?"), event.facts.get("labels", "?")
    return (
        f"Evidence of {_who(terms, event.column, event.value)} vanished from its source{_until(event)}: "
        f"predictions {_change(predictions)}, labels {_change(labels)}."
    )


def _rejected(event: Event, terms: Terms) -> str:
    reasons = ", ".join(f"{safe(str(reason))} {count}" for reason, count in sorted(event.facts.items()))
    return f"Rows of {_who(terms, event.column, event.value)} cannot be used: {reasons}."


def _late(event: Event, terms: Terms) -> str:
    return (
        f"{event.facts.get('now', '?')} labels of {_who(terms, event.column, event.value)} came later than its label_lag of "
        f"{terms.label_lag // 86400} days and are not counted."
    )


def _superseded(event: Event, terms: Terms) -> str:
    by = safe(str(event.facts.get("by", "?")), _NAME)
    answers = event.facts.get("breach")
    why = f"; it answers breach number {answers}" if answers else ""
    return (
        f"{_who(terms, event.column, event.value)} is superseded by version {by}{why}; the new version starts with no evidence "
        "and with the whole risk afresh."
    )


def _plain(event: Event) -> str:
    facts = "; ".join(f"{safe(str(name))} {safe(str(value))}" for name, value in sorted(event.facts.items()))
    about = f" of {safe(event.promise, _NAME)} version {safe(event.version, _NAME)}" if event.promise else ""
    return f"{event.kind.replace('-', ' ').capitalize()}{about}{f': {facts}' if facts else ''}."


_TOLD: Final[Mapping[str, Callable[[Event, Terms], str]]] = {
    "breach": _breach,
    "breach-withdrawn": _withdrawn,
    "warning": _warning,
    "warning-over": _warning_over,
    "supported": _supported,
    "support-lost": _support_lost,
    "stale": _stale,
    "evidence-shrank": _shrank,
    "rows-rejected": _rejected,
    "late-labels": _late,
    "superseded": _superseded,
}


_WITH_FIGURES: Final = ("warning", "warning-over", "supported", "support-lost")


def _who(terms: Terms, column: str, value: str) -> str:
    name = f"{safe(terms.promise, _NAME)} (version {safe(terms.version, _NAME)})"
    return f"{name}, {safe(column, _NAME)} = {safe(value, _NAME)}," if column else name


def _measure(terms: Terms) -> str:
    words = {"error": "errors", "miss": "misses among the positive", "false-alarm": "false alarms among the negative"}
    return words.get(terms.measure, "mean loss")


def _until(event: Event) -> str:
    if event.bucket is None:
        return ""
    return f" in the bucket of {_day(datetime.fromtimestamp(event.bucket, UTC))}"


def _now(standing: Standing | None) -> str:
    if standing is None or standing.estimate is None:
        return ""
    return (
        f" Since the release: {standing.errors:g} errors in {standing.labels} labels ({rate(standing.estimate)}, between "
        f"{rate(standing.life.lower)} and {rate(standing.life.upper)})."
    )


def _change(pair: Any) -> str:
    return f"from {pair[0]} to {pair[1]}" if isinstance(pair, list | tuple) and len(pair) == 2 else safe(str(pair))


def _date(text: Any) -> str:
    try:
        return _day(datetime.fromisoformat(str(text)))
    except ValueError:
        return safe(str(text))


def _day(time: datetime) -> str:
    return time.astimezone(UTC).strftime("%Y-%m-%d %H:%M UTC")
