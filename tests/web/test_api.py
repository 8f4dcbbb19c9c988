"""The JSON API: the JSON of a look, history in pages, events, reports, rejects, acknowledgement, CSV of every table."""

from __future__ import annotations

import csv
import io
import json
from http import HTTPStatus

import pytest
from web.test_refusals import schema_of

from watcher.answer import event_json, standing_json
from watcher.web.tables import csv_text, flat

PROMISE = "/api/v1/promises/damage-photos/1"


def test_promises_are_those_of_the_newest_look(demo):
    """The list holds the whole of each promise in the JSON of a look; a state picks some."""
    client, standing = demo.client(), demo.ledger.standings()[0]
    answer = client.get("/api/v1/promises").json()

    assert (answer["look"], answer["head"]) == (demo.ledger.head().look, demo.ledger.head().digest)
    assert answer["promises"] == json.loads(json.dumps([standing_json(standing)]))
    assert client.get("/api/v1/promises?state=breached").json()["promises"] == []


def test_a_promise_has_slices_and_terms(demo):
    """One promise in full: its slices beside the whole, its frozen terms, its sentence."""
    answer = demo.client().get(PROMISE).json()

    assert {(s["slice"]["value"], s["state"]) for s in answer["slices"]} >= {
        ("Cedar", "breached"),
        ("Birch", "supported"),
    }
    assert answer["terms"]["label_lag"] == 864_000
    assert "The promise of 3% is supported" in answer["sentence"]


def test_history_follows_its_own_links_to_the_end(demo):
    """Pages of any size hold every day once, newest first, for the whole and for a slice."""
    client = demo.client()
    cedar = next(s for s in client.get(PROMISE).json()["slices"] if s["slice"]["value"] == "Cedar")
    from watcher.web.places import slice_id

    for query, column, value in (("", "", ""), (f"&slice={slice_id('depot', 'Cedar')}", "depot", "Cedar")):
        expected = [day.isoformat() for day, _, _ in demo.ledger.history("damage-photos", "1", column, value)]
        found, newest, address = [], None, f"{PROMISE}/history?limit=5{query}"
        while address:
            answer = client.get(address).json()
            found += [each["day"] for each in answer["days"]]
            newest = newest or answer["days"][0]["standing"]
            address = answer["next"]

        assert found == expected
        assert len(found) > 5
    assert newest == cedar


def test_events_follow_their_own_links_to_the_end(demo):
    """Every event once, newest first, with its sentence; kinds and promises pick some."""
    client, found, address = demo.client(), [], "/api/v1/events?limit=4&promise=damage-photos"
    while address:
        answer = client.get(address).json()
        found += answer["events"]
        address = answer["next"]
    expected = [json.loads(json.dumps(event_json(e))) for e in demo.ledger.events(limit=1000)]

    assert [{k: v for k, v in each.items() if k != "sentence"} for each in found] == expected
    assert all(each["sentence"] for each in found)
    breaches = client.get("/api/v1/events?kind=breach").json()["events"]
    assert [(b["slice"]["value"], b["facts"]["number"]) for b in breaches] == [("Cedar", 1)]


def test_counts_add_up_to_the_standing(demo):
    """The days that are sealed hold the labels that have entered the evidence."""
    client = demo.client()
    days = client.get(f"{PROMISE}/counts").json()["days"]
    standing = demo.ledger.standings()[0]

    assert sum(d["labels"] for d in days if d["sealed"]) == standing.labels
    assert sum(d["predictions"] for d in days if d["sealed"]) == standing.predictions
    assert [d["day"] for d in days] == sorted(d["day"] for d in days)


def test_reports_are_listed_and_served(demo):
    """A report's files are one entry, and each is served as it was stored."""
    head = demo.ledger.head()
    for content in (b"old", b"new"):
        files = [("2026-W10.html", b"<p>" + content), ("2026-W10.csv", b"a")]
        demo.ledger.reports.add("2026-W10", files, head=head, created=demo.clock(), final=True)
    client = demo.client()
    answer = client.get("/api/v1/reports").json()["reports"]

    assert [(r["week"], r["revision"], r["files"]) for r in answer] == [
        ("2026-W10", 1, ["2026-W10.csv", "2026-W10.html"]), ("2026-W10", 0, ["2026-W10.csv", "2026-W10.html"]),
    ]  # fmt: skip
    assert client.get("/api/v1/reports/2026-W10/1/2026-W10.html").content == b"<p>new"
    assert client.get("/reports/2026-W10/0/2026-W10.html").content == b"<p>old"
    assert "revision 1" in client.get("/reports").text


def test_an_acknowledgement_names_the_token(demo):
    """Who is the token's name, whatever the body says; the answer is the look that recorded it."""
    client = demo.client(demo.act)
    body = {"promise": "damage-photos", "version": "1", "breach": 1, "why": "camera"}
    assert client.post("/api/v1/acknowledgements", json={**body, "who": "somebody"}).status_code == 422
    answer = client.post("/api/v1/acknowledgements", json=body)
    event = client.get("/api/v1/events?kind=breach").json()["events"][0]

    assert answer.status_code == 201
    assert answer.json()["look"] == demo.ledger.head().look
    assert event["acknowledged_by"] == answer.json()["who"]
    assert answer.json()["who"].startswith("maria-")
    assert client.post("/api/v1/acknowledgements", json={**body, "breach": 9}).status_code == 409
    assert client.post("/api/v1/acknowledgements", json={**body, "version": "9"}).status_code == 404


@pytest.mark.parametrize(("path", "key"), [
    ("/api/v1/promises", "promises"), (f"{PROMISE}/history", "days"), (f"{PROMISE}/counts", "days"), ("/api/v1/events", "events"),
    ("/api/v1/sources", "sources"), ("/api/v1/reports", "reports"),
])  # fmt: skip
def test_every_table_is_there_as_csv(demo, path, key):
    """The CSV of a table has a line for each entry of its JSON and a column for each of its numbers."""
    demo.ledger.reports.add("2026-W10", [("a", b"")], head=demo.ledger.head(), created=demo.clock(), final=False)
    client = demo.client()
    rows = client.get(path).json()[key]
    answer = client.get(path, params={"format": "csv"})
    table = list(csv.DictReader(io.StringIO(answer.text)))

    assert answer.headers["content-type"] == "text/csv; charset=utf-8"
    assert len(table) == len(rows) > 0
    for shown, row in zip(table, rows, strict=True):
        for name, value in flat(row).items():
            if isinstance(value, int | float) and not isinstance(value, bool):
                assert float(shown[name]) == value


def test_csv_joins_names_and_keeps_absent_parts_empty():
    """Nested values are columns with dots; a part that is missing in one row is an empty cell, not a shift."""
    text = csv_text(
        [{"a": {"b": 1}, "c": True}, {"a": None, "c": False, "d": [1]}, {"a": {"b": "=x"}, "facts": {"k": 1}}]
    )

    assert list(csv.reader(io.StringIO(text))) == [
        ["a.b", "c", "d", "facts"], ["1", "true", "", ""], ["", "false", "[1]", ""], ["'=x", "", "", '{"k": 1}'],
    ]  # fmt: skip


def test_problems_say_what_is_wrong(demo):
    """A request that does not fit is answered with a problem that names each place (RFC 9457)."""
    answer = demo.client().get(f"{PROMISE}/history?limit=0&before=yesterday")
    body = answer.json()

    assert answer.headers["content-type"] == "application/problem+json"
    assert (body["status"], body["title"], body["type"]) == (422, HTTPStatus(422).phrase, "urn:watcher:problem:invalid")
    assert {e["place"] for e in body["errors"]} == {"query.limit", "query.before"}


def test_the_schema_describes_problems_and_tokens(demo):
    """Every operation names its problems, and the scheme of its token."""
    document = schema_of(demo)
    for path, methods in document["paths"].items():
        for operation in methods.values():
            content = operation["responses"]["403"]["content"]
            assert content == {"application/problem+json": {"schema": {"$ref": "#/components/schemas/Problem"}}}, path
            assert operation["security"] == [{"HTTPBearer": []}]


def test_infinite_numbers_are_null(demo):
    """A total of minus infinity (no window old enough yet) is null: JSON knows no infinity."""
    from dataclasses import replace

    from watcher.web.api import standing

    assert standing(replace(demo.ledger.standings()[0], total=float("-inf")))["total"] is None
