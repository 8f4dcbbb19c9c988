"""One event as one plain sentence, and what to do about it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from typing import Any, Final

from watcher.records import Event, Terms
from watcher.text import safe
from watcher.wording.numbers import amount, counted, day, duration, last, one_in, percent, rate
from watcher.wording.standing import RATE

_STEPS: Final[Mapping[str, str]] = {
    "breach": "Decide with the accountable people whether the classifier may go on being used; acknowledge the breach.",
    "breach-withdrawn": "Stop what the breach had started.",
    "warning": "Label more of the newest samples, so that the evidence decides sooner.",
    "support-lost": "Nothing is broken; more labels decide it.",
    "stale": "Find out why labels no longer arrive.",
    "source-failed": "Mend the source, or the way to it; the next look tries again.",
    "rows-rejected": "See which rows with `watcher rejects` and mend them at the source before their bucket is sealed.",
    "evidence-shrank": "Find out why rows or labels vanished from the source: deleted rows are missing evidence.",
    "late-labels": "If that is usual, `label_lag` is too short: give the next version a longer one.",
    "clock-went-back": "Set the machine's clock right; no look is made until then.",
}


def event_sentence(event: Event, terms: Terms | None = None) -> str:
    """What happened, in one sentence; with the promise's terms dates are in its zone, without them in UTC.

    Facts that are missing or odd are left out or shown as they are, made safe: an old ledger must stay readable.
    """
    tell = _TOLD.get(event.kind, _other)
    return f"{_who(event)}{tell(event, terms)}"


def event_step(event: Event) -> str:
    """What to do next; empty where nothing needs doing."""
    return _STEPS.get(event.kind, "")


def _who(event: Event) -> str:
    if not event.promise:
        return ""
    about = f"{safe(event.promise)} version {safe(event.version)}"
    if event.column:
        about += f", {safe(event.column)} = {safe(event.value) or '(empty)'}"
    return f"{about}: "


def _breach(event: Event, terms: Terms | None) -> str:
    facts, number = event.facts, _plain(event.facts.get("number", "?"))
    promised = f"the promise of {rate(terms.tolerance)} is broken" if terms else "the promise is broken"
    told = f"{promised} (breach {number})"
    if "lower" in facts and "at" in facts:
        average = RATE[terms.measure] if terms else "error"
        lower = percent(float(facts["lower"]), down=True, decimals=2)
        told += (
            f": over some period that ended with {_last(facts['at'], terms)} the average {average} was above {lower}"
        )
    if "since" in facts:
        told += f"; likeliest start {_date(facts['since'], terms)}"
        if "window_labels" in facts and "window_errors" in facts:
            seen = counted(int(facts["window_labels"]), "label")
            told += f", {_amount(facts['window_errors'])} errors in {seen} since then"
    return told + "."


def _supported(event: Event, terms: Terms | None) -> str:
    since = f" since {_date(event.facts['since'], terms)}" if "since" in event.facts else ""
    limit = f" of {rate(terms.tolerance)}" if terms else ""
    chance = f"; wrong with chance at most {one_in(terms.risk)}" if terms and not event.column else ""
    return f"the average{since} supports the promise{limit}{chance}."


def _support_lost(event: Event, terms: Terms | None) -> str:
    del terms
    because = " because no new labels arrive" if event.facts.get("because") == "stale" else ""
    return f"the promise is no longer supported{because}; it is not broken either."


def _warning(event: Event, terms: Terms | None) -> str:
    limit = f" above {rate(terms.tolerance)}" if terms else ""
    return f"early warning{_in_bucket(event, terms)}, a first sign of a rise{limit}."


def _stale(event: Event, terms: Terms | None) -> str:
    newest = event.facts.get("newest_label")
    return f"labels have stopped; {f'the newest is of {_date(newest, terms)}' if newest else 'none has arrived since the release'}."


def _resumed(event: Event, terms: Terms | None) -> str:
    newest = event.facts.get("newest_label")
    return f"labels arrive again{f'; the newest is of {_date(newest, terms)}' if newest else ''}."


def _failed(event: Event, terms: Terms | None) -> str:
    del terms
    source, reason = _plain(event.facts.get("source", "?")), _plain(event.facts.get("reason", "no reason given"))
    detail = f" ({safe(str(event.facts['detail']), 200)})" if event.facts.get("detail") else ""
    return f"Source {source} gave no answer: {reason}{detail}. The counts stay as they were."


def _restored(event: Event, terms: Terms | None) -> str:
    since = f"; it had failed since {_date(event.facts['since'], terms)}" if event.facts.get("since") else ""
    return f"Source {_plain(event.facts.get('source', '?'))} answers again{since}."


def _rejected(event: Event, terms: Terms | None) -> str:
    del terms
    reasons = ", ".join(f"{_amount(n)} {_plain(reason)}" for reason, n in sorted(event.facts.items()))
    return f"rows cannot be used: {reasons or 'no count given'}."


def _shrank(event: Event, terms: Terms | None) -> str:
    def change(name: str) -> str:
        pair = event.facts.get(name)
        told = f"{_amount(pair[0])} to {_amount(pair[1])}" if isinstance(pair, list | tuple) and len(pair) == 2 else "?"
        return f"{name} {told}"

    return f"rows vanished from the source{_in_bucket(event, terms)}: {change('predictions')}, {change('labels')}."


def _late(event: Event, terms: Terms | None) -> str:
    after = f" more than {duration(terms.label_lag)} after their bucket" if terms else " after their bucket was sealed"
    return f"{_amount(event.facts.get('now', '?'))} labels came{after} and are not counted."


def _released(event: Event, terms: Terms | None) -> str:
    when = event.facts.get("released")
    return f"watched from now on; evidence counts from the release{f' on {_date(when, terms)}' if when else ''}."


def _superseded(event: Event, terms: Terms | None) -> str:
    answers = event.facts.get("breach")
    why = f", which answers breach {_plain(answers)}" if answers else ""
    when = event.facts.get("released")
    since = f", released on {_date(when, terms)}" if when else ""
    return f"superseded by version {_plain(event.facts.get('by', '?'))}{since}{why}; that one starts with no evidence."


def _acknowledged(event: Event, terms: Terms | None) -> str:
    del terms
    who = f" by {_plain(event.facts['who'])}" if event.facts.get("who") else ""
    note = f" “{safe(str(event.facts['note']), 200)}”" if event.facts.get("note") else ""
    return f"the breach was acknowledged{who}{note}; it stands."


def _other(event: Event, terms: Terms | None) -> str:
    del terms
    facts = "; ".join(f"{_plain(name)} {_plain(value)}" for name, value in sorted(event.facts.items()))
    return f"{_plain(event.kind).replace('-', ' ')}{f': {facts}' if facts else ''}."


def _told(text: str) -> Callable[[Event, Terms | None], str]:
    def tell(event: Event, terms: Terms | None) -> str:
        del event, terms
        return text

    return tell


_TOLD: Final[Mapping[str, Callable[[Event, Terms | None], str]]] = {
    "breach": _breach,
    "breach-withdrawn": _told("the breach is withdrawn: corrected labels no longer show it."),
    "warning": _warning,
    "warning-over": _told("the early warning is over."),
    "supported": _supported,
    "support-lost": _support_lost,
    "stale": _stale,
    "labels-resumed": _resumed,
    "source-failed": _failed,
    "source-restored": _restored,
    "rows-rejected": _rejected,
    "evidence-shrank": _shrank,
    "late-labels": _late,
    "clock-went-back": _told("The clock went back behind the newest look; no look is made until it has caught up."),
    "released": _released,
    "superseded": _superseded,
    "acknowledged": _acknowledged,
}


def _in_bucket(event: Event, terms: Terms | None) -> str:
    if event.bucket is None:
        return ""
    return f" in the bucket of {day(datetime.fromtimestamp(event.bucket, UTC), terms.time_zone if terms else UTC)}"


def _plain(value: Any) -> str:
    return safe(str(value))


def _amount(value: Any) -> str:
    try:
        return amount(float(value))
    except (TypeError, ValueError):
        return _plain(value)


def _moment(value: Any) -> datetime | None:
    try:
        found = datetime.fromisoformat(str(value))
    except ValueError:
        return None
    return found if found.tzinfo else None


def _date(value: Any, terms: Terms | None) -> str:
    found = _moment(value)
    return _plain(value) if found is None else day(found, terms.time_zone if terms else UTC)


def _last(value: Any, terms: Terms | None) -> str:
    found = _moment(value)
    return _plain(value) if found is None else last(found, terms.time_zone if terms else UTC)
