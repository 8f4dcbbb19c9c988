"""What one notice says: the shared sentence about its event, its risk, and what to do next."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

from watcher.records import Event, Notice, Standing, Terms
from watcher.text import safe
from watcher.wording import event_sentence, event_step, moment, next_steps, one_in, sentence

_NOTHING: Final = "Nothing needs doing."
_PERIODIC: Final[Mapping[str, str]] = {
    "heartbeat": "Nothing needs doing; when these messages stop coming, look after the daemon.",
    "reminder": "Acknowledge the breach with `watcher acknowledge`: that stops this reminder and nothing else.",
    "report": "Read the weekly report.",
}


def told(event: Event, terms: Terms | None) -> str:
    """What happened. The same at every try, since event and terms never change; `terms` is None for events of a source."""
    said = event_sentence(event, terms)
    if event.kind != "breach" or terms is None:
        return said
    return f"{said} The chance that this promise is ever wrongly said to be broken is at most {one_in(terms.risk)}."


def now(standing: Standing | None, terms: Terms | None, unit: str) -> str:
    """Where the slice of the event stands when the message is written; "" where that is not known."""
    return "" if standing is None or terms is None else sentence(standing, terms, unit)


def advice(event: Event, standing: Standing | None) -> str:
    """What to do next: for a breach all that its standing suggests, else what the event calls for."""
    if event.kind == "breach" and standing is not None and standing.breach is not None:
        return " ".join(next_steps(standing))
    return event_step(event) or _NOTHING


def periodic(notice: Notice, terms: Terms | None, standing: Standing | None) -> tuple[str, str]:
    """(sentence, advice) of a heartbeat, a reminder or a report notice; `standing` is that of the whole promise."""
    about = f"{safe(notice.promise)} version {safe(notice.version)}"
    step = _PERIODIC[notice.kind]
    if notice.kind == "reminder":
        since = ""
        if standing is not None and standing.breach is not None and terms is not None:
            since = f"; it was noticed on {moment(standing.breach.noticed, terms.time_zone)}"
        return f"{about}: breach {notice.breach_number} has not been acknowledged{since}.", step
    if notice.kind == "report":
        return f"{about}: a new weekly report is there.", step
    return f"The daemon is alive; the newest look it had recorded by then is number {notice.look}.", step
