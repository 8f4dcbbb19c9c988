"""What a message says. Check values: computed by hand from the facts in notices/memory.py."""

from __future__ import annotations

import csv
import io
import json
import math
from dataclasses import replace
from typing import Any

from notices.memory import (
    DIGEST,
    LEDGER,
    T0,
    Memory,
    breach_event,
    some_counts,
    some_event,
    some_standing,
)

from watcher.notices.base import Attachment, LogTarget, MailTarget, Message, RouteSpec
from watcher.notices.bundle import counts_csv
from watcher.notices.envelope import body
from watcher.notices.message import Writer
from watcher.notices.pages import html, text

DESK = RouteSpec("desk", LogTarget())
RETRAIN = RouteSpec("retraining", LogTarget(), retrain=True)
HOSTILE = '=HYPERLINK("http://x")<script>\r\n\x1b[31m\u202e'
DAY = 86400
RELEASED = 1793577600


def _write(memory: Memory, route: RouteSpec = DESK) -> Message:
    writer = Writer(memory, lambda promise, _: f"http://127.0.0.1:8750/#{promise}")
    return writer(route, "id", list(memory.waiting(route.name)))


def test_a_breach_says_numbers_window_dates_risk_slice_and_what_to_do() -> None:
    """0.0312 as the lower limit, 51 errors in 812 labels since 12 November, window to 29 November, risk 1 in 1,000."""
    memory = Memory()
    memory.happen(breach_event(column="depot", value="Birch"), 7, 0, T0, "desk")
    memory.known_standings["damage-photos", "1"] = [some_standing(), some_standing(column="depot", value="Birch")]
    (item,) = _write(memory).items

    for part in ("damage-photos", "depot = Birch", "3%", "3.12%", "29 November 2026", "12 November 2026", "51", "812"):
        assert part in item.sentence
    assert "at most 1 in 1,000" in item.sentence
    assert item.now.startswith("depot = Birch")
    assert "acknowledge" in item.advice
    assert item.where == "http://127.0.0.1:8750/#damage-photos"
    assert (item.column, item.value, item.facts["number"]) == ("depot", "Birch", 1)


def test_the_sentence_does_not_depend_on_how_things_stand_when_it_is_tried_again() -> None:
    """Event and terms are what it is made of; where things stand now is told apart from it."""
    memory = Memory()
    memory.happen(breach_event(), 7, 0, T0, "desk")
    first = _write(memory).items[0]
    memory.known_standings["damage-photos", "1"] = [replace(some_standing(), breach=None, state="undecided")]
    second = _write(memory).items[0]

    assert first.sentence == second.sentence
    assert first.now != second.now


def test_the_message_bears_look_head_and_ledger() -> None:
    """Look number and head digest stand in every notice, in JSON, text and HTML."""
    memory = Memory()
    memory.happen(some_event(), 7, 0, T0, "desk")
    message = _write(memory)
    told = json.loads(body(message))

    assert (told["data"]["look"], told["data"]["head"]) == (7, f"7:{DIGEST}")
    assert told["source"] == f"urn:watcher:{LEDGER}"
    assert f"7:{DIGEST}" in text(message)
    assert f"7:{DIGEST}" in html(message)


def test_subject_and_title_name_the_gravest_notice() -> None:
    """A breach comes before what else the look brought; several promises are told of as the look."""
    memory = Memory()
    memory.happen(some_event("late-labels", now=3), 7, 0, T0, "desk")
    memory.happen(breach_event(), 7, 1, T0, "desk")
    one = _write(memory)
    memory.happen(some_event("warning", promise="other"), 7, 2, T0, "desk")
    several = _write(memory)

    assert (one.subject, one.title) == ("damage-photos/1", "damage-photos: breach and 1 more [look 7]")
    assert (several.subject, several.title) == ("look/7", "damage-photos: breach and 2 more [look 7]")


def test_an_event_of_a_source_needs_no_promise() -> None:
    """`source-failed` has neither promise nor terms."""
    memory = Memory()
    memory.happen(some_event("source-failed", promise="", source="desk", reason="missing"), 7, 0, T0, "desk")
    message = _write(memory)

    assert (message.subject, message.standings) == ("look/7", ())
    assert "missing" in message.items[0].sentence


def test_periodic_notices_say_what_they_are() -> None:
    """Heartbeat, reminder and report, each of a type of its own."""
    said = {}
    for kind, promise in (("heartbeat", ""), ("reminder", "damage-photos"), ("report", "damage-photos")):
        memory = Memory()
        memory.periodic("desk", kind, 7, T0, promise, "1" if promise else "")
        message = _write(memory)
        said[message.type] = message.items[0].sentence

    assert sorted(said) == ["watcher.heartbeat", "watcher.reminder", "watcher.report"]
    assert "number 7" in said["watcher.heartbeat"]
    assert "breach 1 has not been acknowledged" in said["watcher.reminder"]
    assert "weekly report" in said["watcher.report"]


def test_every_kind_of_event_can_be_told() -> None:
    """With no facts at all, as an old ledger may have them."""
    from watcher.records import EVENTS

    for kind in EVENTS:
        memory = Memory()
        memory.happen(some_event(kind), 7, 0, T0, "desk")
        (item,) = _write(memory).items
        assert item.sentence
        assert item.advice


def test_a_retraining_message_carries_the_evidence_and_the_verdict() -> None:
    """Counts a bucket and slice as CSV, standings as JSON; an ordinary route gets neither."""
    memory = Memory()
    memory.happen(breach_event(), 7, 0, T0, "retraining", "desk", number=1)
    memory.known_counts["damage-photos", "1"] = [
        some_counts(RELEASED + DAY, "depot", "Birch", predictions=9, labels=5, errors=2),
        some_counts(RELEASED, predictions=20, labels=10, errors=1, newest=RELEASED + 60),
    ]
    files = {file.name: file.text for file in _write(memory, RETRAIN).attachments}
    rows = list(csv.DictReader(io.StringIO(files["counts.csv"])))
    verdict = json.loads(files["verdict.json"])

    assert [(r["bucket"], r["slice_value"], r["labels"], r["errors"], r["newest_label"]) for r in rows] == [
        ("2026-11-02T00:00:00Z", "", "10", "1", "2026-11-02T00:01:00Z"),
        ("2026-11-03T00:00:00Z", "Birch", "5", "2", ""),
    ]
    assert (verdict["promise"], verdict["standings"][0]["state"], verdict["counts_left_out"]) == (
        "damage-photos",
        "breached",
        0,
    )
    assert _write(memory).attachments == ()


def test_a_bundle_that_would_be_too_large_leaves_out_its_oldest_lines_and_says_how_many() -> None:
    """The newest buckets stay; header and kept lines fit the limit."""
    rows = [some_counts(RELEASED + day * DAY, predictions=1) for day in range(100)]
    table, left_out = counts_csv(rows, RELEASED, most=1000)
    kept = list(csv.DictReader(io.StringIO(table)))

    assert len(table) <= 1000
    assert len(kept) + left_out == 100
    assert kept[-1]["bucket"] == "2027-02-09T00:00:00Z"


def test_the_standings_are_those_of_the_whole_and_of_the_slices_that_are_told_of() -> None:
    """A promise with hundreds of slices does not make every message large."""
    memory = Memory()
    memory.happen(breach_event(column="depot", value="Birch"), 7, 0, T0, "desk")
    others = [some_standing(column="depot", value=value) for value in ("Alder", "Birch", "Cedar")]
    memory.known_standings["damage-photos", "1"] = [some_standing(), *others]
    slices = [standing["slice"] for standing in _write(memory).standings]

    assert slices == [None, {"column": "depot", "value": "Birch"}]


def test_where_things_stand_is_told_once_for_several_events_of_one_promise() -> None:
    """In text and HTML; the JSON repeats it, so that every notice there stands for itself."""
    memory = Memory()
    memory.happen(some_event("stale"), 7, 0, T0, "desk")
    memory.happen(some_event("late-labels", now=3), 7, 1, T0, "desk")
    message = _write(memory)

    assert (text(message).count("Now: "), html(message).count("Now:")) == (1, 1)
    assert message.items[0].now == message.items[1].now


def test_hostile_slice_values_stay_text_everywhere() -> None:
    """No control character, no markup, no formula, in text, HTML, JSON and CSV."""
    memory = Memory()
    memory.happen(breach_event(column="depot", value=HOSTILE), 7, 0, T0, "retraining", number=1)
    memory.known_counts["damage-photos", "1"] = [some_counts(RELEASED, "depot", HOSTILE, predictions=1)]
    message = _write(memory, RETRAIN)
    (line,) = list(csv.reader(io.StringIO(message.attachments[0].text)))[1:]

    assert message.title.isprintable()
    assert message.items[0].sentence.isprintable()
    assert "<script" not in html(message)
    assert "\x1b" not in text(message)
    assert line[2].startswith("'=")
    assert json.loads(body(message))["data"]["notices"][0]["slice"]["value"] == HOSTILE


def test_an_infinite_total_becomes_null_in_the_json() -> None:
    """Before the first label the total is minus infinity, which JSON does not know."""
    memory = Memory()
    memory.happen(breach_event(), 7, 0, T0, "retraining", number=1)
    memory.known_standings["damage-photos", "1"] = [replace(some_standing(), total=-math.inf)]
    told: Any = json.loads(body(_write(memory, RETRAIN)))["data"]

    assert told["standings"][0]["total"] is None
    assert told["evidence"]["verdict.json"]["standings"][0]["total"] is None


def test_the_noun_of_the_configuration_is_used() -> None:
    """`unit` gives it by promise and version."""
    memory = Memory()
    memory.happen(breach_event(), 7, 0, T0, "desk")
    writer = Writer(memory, lambda *_: "", lambda promise, version: f"{promise}-{version}-parcel")
    (item,) = writer(DESK, "id", list(memory.waiting("desk"))).items

    assert "damage-photos-1-parcel" in item.now


def test_mail_carries_the_report_that_its_notice_announces() -> None:
    """The other routes say where it is; a heartbeat carries nothing."""
    page = Attachment("2026-W48.html", "text/html", "<html></html>")
    mail = RouteSpec("m", MailTarget("h", 25, "a@b", ("c@d",), security="none"))
    for route, kind, expected in ((mail, "report", (page,)), (DESK, "report", ()), (mail, "heartbeat", ())):
        memory = Memory()
        memory.periodic(route.name, kind, 7, T0, "damage-photos", "1")
        memory.known_standings["damage-photos", "1"] = [some_standing()]
        writer = Writer(memory, lambda promise, _: promise, report=lambda _notice: (page,))

        assert writer(route, "id", list(memory.waiting(route.name))).attachments == expected
