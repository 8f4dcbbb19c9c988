"""The sentences and number formats that command line, page, notices and report share: pure functions of records."""

from __future__ import annotations

from watcher.wording.cautions import CAUTIONS, budgets, method
from watcher.wording.diagnostics import diagnostic_lines, diagnostic_sentences
from watcher.wording.events import event_sentence, event_step
from watcher.wording.numbers import (
    about,
    amount,
    counted,
    day,
    duration,
    last,
    limits,
    moment,
    nats,
    one_in,
    percent,
    period,
    plural,
    rate,
    span,
)
from watcher.wording.standing import flag_sentences, headline, limits_chance, name, next_steps, sentence

__all__ = [
    "CAUTIONS",
    "about",
    "amount",
    "budgets",
    "counted",
    "day",
    "diagnostic_lines",
    "diagnostic_sentences",
    "duration",
    "event_sentence",
    "event_step",
    "flag_sentences",
    "headline",
    "last",
    "limits",
    "limits_chance",
    "method",
    "moment",
    "name",
    "nats",
    "next_steps",
    "one_in",
    "percent",
    "period",
    "plural",
    "rate",
    "sentence",
    "span",
]
