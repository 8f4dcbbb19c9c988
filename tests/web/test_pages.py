"""What the pages say: the shared sentences, figures that line up with the ledger, and a clear word when it is away."""

from __future__ import annotations

import html
import re
from dataclasses import replace
from html.parser import HTMLParser
from itertools import pairwise

import pytest
from structlog.testing import capture_logs
from web.world import house

from watcher import wording
from watcher.errors import LedgerBusy, WatcherError
from watcher.ledger.overview import overview
from watcher.ledger.store import Ledger
from watcher.report.charts import THEMES
from watcher.web.places import slice_path

PROMISE = "/promises/damage-photos/1"
CEDAR = slice_path("damage-photos", "1", "depot", "Cedar")


class Reader(HTMLParser):
    """Text, ids, headings and label targets of a page; complains about elements that stay open."""

    VOID = frozenset(["meta", "link", "input", "br", "img", "line", "path", "circle", "rect"])

    def __init__(self, text: str) -> None:
        super().__init__()
        self.words: list[str] = []
        self.ids: list[str] = []
        self.headings: list[str] = []
        self.labels: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        found = dict(attrs)
        self.tags.append((tag, found))
        self.ids += [found["id"]] if "id" in found else []
        self.labels += [found["for"]] if tag == "label" else []
        self.headings += [tag] if re.fullmatch("h[1-6]", tag) else []
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


def read(client, path) -> Reader:
    """A page that must be there, well formed to the last element."""
    answer = client.get(path)
    assert answer.status_code == 200, answer.text[-500:]
    reader = Reader(answer.text)
    assert reader.open == []
    return reader


def whole(ledger):
    """The whole of the demo's promise and its terms."""
    return ledger.standings()[0], ledger.terms()[0].terms


def test_the_overview_says_where_each_promise_stands(demo):
    """Sentence, figures, broken slices and the newest events are on the first page, and the look it speaks of."""
    standing, terms = whole(demo.ledger)
    page = read(demo.client(), "/")

    assert wording.sentence(standing, terms, "photo") in page.text
    assert "broken in part" in page.text
    assert "depot = Cedar is broken." in page.text
    assert f"{standing.errors:,.0f} of {standing.labels:,}" in page.text
    assert f"Look {demo.ledger.head().look}, head {demo.ledger.head().digest}" in page.text
    assert "likeliest start" in page.text


def test_a_promise_page_holds_everything_about_it(demo):
    """Sentence, next steps, tables behind three charts, slices by total, diagnostics, events, risk, budgets, terms, cautions."""
    standing, terms = whole(demo.ledger)
    page = read(demo.client(), PROMISE)
    slices = re.findall(r"(?:depot|carrier) = (?:Cedar|Wren|Birch|Plover|Alder)", page.text.partition("Ordered by")[2])
    expected = sorted(
        (s for s in demo.ledger.standings() if s.column), key=lambda s: (-s.total / s.threshold, s.column, s.value)
    )

    assert wording.sentence(standing, terms, "photo") in page.text
    assert wording.budgets(terms) in page.text
    assert wording.CAUTIONS in page.text
    assert slices[:5] == [wording.name(s) for s in expected]
    for said in ("Limits against the tolerance", "Evidence against the promise", "Labels a day", "are labelled;", "Events",
                 "How each budget is shared", "1 in 12,500", "The terms", demo.ledger.terms()[0].digest, "label lag"):  # fmt: skip
        assert said in page.text
    for row in ("20% 75% 5%", "50% 45% 5%", "– 95% 5%"):
        assert row in page.text


def test_a_slice_page_tells_of_the_slice_alone(demo):
    """The broken depot's page holds its own sentence, its part of the risk and its own events."""
    cedar = next(s for s in demo.ledger.standings() if s.value == "Cedar")
    page = read(demo.client(), CEDAR)

    assert wording.sentence(cedar, demo.ledger.terms()[0].terms, "photo") in page.text
    assert "8.00% of it: a risk of 1 in 12,500" in page.text
    assert "breach" in page.text
    assert "carrier = Wren" not in page.text.partition("Events of this slice")[2]


@pytest.mark.parametrize("path", ["/", PROMISE, CEDAR, "/events", "/risk", "/reports", "/sign-in"])
def test_a_page_can_be_read_by_machine_and_ear(demo, path):
    """One main heading and none skipped, ids once, labels with fields, tables with heads, nothing inline, no other site."""
    page = read(demo.client(), path)
    levels = [int(each[1]) for each in page.headings]
    fields = {a["id"] for tag, a in page.tags if tag in ("input", "select", "textarea") and "id" in a}
    shown = [
        a
        for tag, a in page.tags
        if tag in ("input", "select", "textarea") and a.get("type") != "hidden" and "hidden" not in a
    ]
    addresses = [a[key] for _, a in page.tags for key in ("href", "src", "action") if key in a]

    assert levels.count(1) == 1
    assert all(after <= before + 1 for before, after in pairwise(levels))
    assert len(page.ids) == len(set(page.ids))
    assert set(page.labels) == fields == {a.get("id") for a in shown}
    assert all(address.startswith(("/", "#")) for address in addresses)
    assert not [a for _, a in page.tags if "style" in a or any(key.startswith("on") for key in a)]
    tables = sum(tag == "table" for tag, _ in page.tags)
    assert sum(tag == "caption" for tag, _ in page.tags) == tables
    assert all("scope" in a for tag, a in page.tags if tag == "th")
    scripts = [a for tag, a in page.tags if tag == "script"]
    assert all("src" in a for a in scripts)


def test_filters_find_a_promise(demo):
    """The overview's filter works by address, without a script."""
    client = demo.client()

    assert "damage-photos" in read(client, "/?q=DAMAGE").text
    assert "No promise fits" in read(client, "/?q=else").text
    assert "No promise fits" in read(client, "/?state=supported").text


def test_events_are_paged(demo):
    """Older events follow by a link; every event is on exactly one page, newest first."""
    client = demo.client()
    everything = demo.ledger.events(limit=1000)
    assert len(everything) > 3
    first = read(client, "/events")

    assert first.text.count("look ") >= min(50, len(everything))
    last = everything[2]
    older = read(client, f"/events?before={last.look}-{last.n}")
    ids = [i for i in older.ids if i.startswith("event-")]
    assert ids == [f"event-{e.look}-{e.n}" for e in everything[3:53]]
    assert client.get("/events?before=x").status_code == 422
    assert client.get("/events?kind=x").status_code == 422


def test_an_acknowledgement_is_recorded_with_who_and_why(demo):
    """Who signs in with the role act finds a form, and what is sent is in the ledger and on the page under that name."""
    client = demo.client()
    assert "<textarea" not in client.get(PROMISE).text
    client.form("/sign-in", {"token": demo.act, "next": PROMISE})
    assert "<textarea" in client.get(PROMISE).text
    with capture_logs() as logs:
        answer = client.form(PROMISE + "/acknowledge", {"breach": "1", "why": " camera replaced "})
    who = demo.acknowledged.seen[0][3]
    page = read(client, PROMISE)

    assert (answer.status_code, answer.headers["location"]) == (303, PROMISE + "#events")
    assert demo.acknowledged.seen == [("damage-photos", "1", 1, who, "camera replaced")]
    assert who.startswith("maria-")
    assert f"Acknowledged by {who}." in page.text
    assert "<textarea" not in client.get(PROMISE).text
    assert [(e["who"], e["breach"]) for e in logs if e["event"] == "acknowledged"] == [(who, 1)]


@pytest.mark.parametrize(("fields", "status"), [
    ({"breach": "1", "why": "  "}, 422), ({"breach": "1", "why": "x" * 501}, 422), ({"breach": "x", "why": "y"}, 422),
    ({"why": "y"}, 422), ({"breach": "99", "why": "y"}, 409),
])  # fmt: skip
def test_an_acknowledgement_that_does_not_fit_is_refused(demo, fields, status):
    """A missing reason, a number that is none and a breach that is not there are answered with what is needed."""
    client = demo.client(demo.act)

    assert client.form(PROMISE + "/acknowledge", fields).status_code == status
    assert demo.acknowledged.seen == []


def test_signing_in_and_out(guarded):
    """The cookie cannot be read by scripts or sent from other sites, holds no token, ends with sign-out and after 12 hours."""
    client = guarded.client()
    answer = client.form("/sign-in", {"token": guarded.read, "next": "/risk"})
    cookie = answer.headers["set-cookie"]

    assert answer.headers["location"] == "/risk"
    for part in ("__Host-watcher=", "HttpOnly", "SameSite=strict", "Secure", "Path=/"):
        assert part in cookie
    assert guarded.read not in cookie
    assert "(read)" in read(client, "/").text
    client.form("/sign-out", {})
    assert client.get("/").status_code == 303
    client.form("/sign-in", {"token": guarded.read, "next": "/"})
    guarded.clock.forward(hours=12, seconds=1)
    assert client.get("/").status_code == 303


def test_a_session_ends_when_the_service_forgets_it(guarded):
    """A cookie that was copied before signing out opens nothing afterwards."""
    client = guarded.client()
    client.form("/sign-in", {"token": guarded.read, "next": "/"})
    kept = client.cookies["__Host-watcher"]
    client.form("/sign-out", {})

    assert client.get("/", headers={"Cookie": f"__Host-watcher={kept}"}).status_code == 303


@pytest.mark.parametrize(
    "goal", ["//evil.example", "https://evil.example", "/\\evil.example", "javascript:alert(1)", "/a\r\nX: y", ""]
)
def test_signing_in_leads_nowhere_else(guarded, goal):
    """After signing in the way leads to a path of this site, whatever the address asked for."""
    assert guarded.client().form("/sign-in", {"token": guarded.read, "next": goal}).headers["location"] == "/"


@pytest.mark.parametrize("error", [WatcherError("no route to postgresql://u:secret@h/d"), LedgerBusy("locked")])
def test_a_ledger_that_is_away_is_said(demo, error):
    """Pages and API answer 503 in a sentence, without what the driver said; health stays green."""

    def away() -> Ledger:
        raise error

    demo.site = replace(demo.site, ledger=away, ready=lambda: (False, "the ledger cannot be reached"))
    client = demo.client()
    for path in ("/", PROMISE, "/events", "/risk", "/reports", "/api/v1/promises", "/api/v1/events"):
        answer = client.get(path)

        assert answer.status_code == 503
        assert answer.headers["retry-after"] == "5"
        assert "secret" not in answer.text
        assert ("problem" in answer.headers["content-type"]) == path.startswith("/api")
    assert client.get("/healthz").status_code == 200
    ready = client.get("/readyz")
    assert (ready.status_code, ready.text) == (503, "the ledger cannot be reached\n")


def test_an_empty_ledger_says_what_to_do(tmp_path):
    """Before the first look every page is there and says so."""
    empty = house(tmp_path / "empty.db")
    try:
        client = empty.client()
        texts = {path: read(client, path).text for path in ("/", "/events", "/risk", "/reports")}
    finally:
        empty.ledger.close()

    assert "watcher look CONFIG" in texts["/"]
    assert "Nothing has happened yet." in texts["/events"]
    assert "No promise has been looked at yet." in texts["/risk"]


def test_what_is_not_there_is_not_found(demo):
    """Unknown promises, versions and slices are 404, as a page and as a problem."""
    client = demo.client()
    for path in ("/promises/x/1", "/promises/damage-photos/2", PROMISE + "/slices/0123456789abcdef", "/nope"):
        assert client.get(path).status_code == 404
        Reader(client.get(path).text)
    for path in (
        "/api/v1/promises/x/1",
        "/api/v1/promises/damage-photos/1/history?slice=0123456789abcdef",
        "/api/v1/nope",
    ):
        answer = client.get(path)
        assert (answer.status_code, answer.headers["content-type"]) == (404, "application/problem+json")


def test_a_metrics_scrape_is_answered_where_it_is_asked(guarded, demo):
    """/metrics answers at exactly this address without a redirect; off loopback it needs a token of the role read."""
    assert demo.client().get("/metrics").text == "watcher_ledger_look 1\n"
    assert guarded.client(guarded.read).get("/metrics").status_code == 200
    assert guarded.client().get("/metrics").status_code == 401


def test_pictures_stand_in_the_page_in_its_own_colours(demo):
    """A drawn chart gets ids of its own and the page's colours; one that cannot be drawn leaves its table open."""
    colour = THEMES["light"].accent
    drawn = f'<svg width="10" height="5"><defs><clipPath id="clip7"/></defs><g clip-path="url(#clip7)" stroke="{colour}"/></svg>'
    calls = []
    demo.site = replace(demo.site, render=lambda spec: calls.append(spec) or drawn)
    client = demo.client()
    text = client.get(PROMISE).text
    again = client.get(PROMISE).text

    assert len(calls) == 4  # limits, total, labels, slices: once each for this look
    assert text == again
    assert 'id="bounds-0"' in text
    assert "url(#bounds-0)" in text
    assert "clip7" not in text
    assert 'stroke="var(--accent)"' in text

    def broken(spec: object) -> str:
        raise WatcherError("the child died")

    demo.site = replace(demo.site, render=broken)
    page = read(demo.client(), PROMISE)
    assert sum(tag == "details" and "open" in a for tag, a in page.tags) >= 3


def test_the_overview_agrees_with_the_standings(demo):
    """The few statements behind the overview give what the ledger gives promise by promise."""
    head, found = overview(demo.ledger)
    standings = demo.ledger.standings()

    assert head == demo.ledger.head()
    assert [each.whole for each in found] == [s for s in standings if not s.column]
    assert found[0].broken == tuple((s.column, s.value) for s in standings if s.column and s.state == "breached")
    assert found[0].slices == 5
    history = demo.ledger.history("damage-photos", "1", limit=400)
    newest = max(day for day, _, _ in history)
    recent = [s for day, _, s in reversed(history) if (newest - day).days < 60]
    rates = [s.recent.errors / s.recent.labels if s.recent and s.recent.labels else None for s in recent]
    assert [each.rate for each in found[0].days] == rates


def test_a_new_look_is_seen_at_once(demo):
    """The overview is kept only as long as the head of the ledger stays."""
    client = demo.client(demo.act)
    assert "acknowledged" not in read(client, "/").text
    demo.acknowledged("damage-photos", "1", 1, "maria", "seen")

    assert f"look {demo.ledger.head().look}," in read(client, "/").text
    assert "acknowledged" in read(client, "/").text


def test_words_with_quotes_are_code(demo):
    """Commands inside sentences are set as code, and what stands in them is escaped."""
    from watcher.web.pages import ENVIRONMENT

    made = ENVIRONMENT.from_string("{{ text | code }}").render(text="run `watcher <x>` & go")

    assert made == html.escape("run ") + "<code>watcher &lt;x&gt;</code> &amp; go"
