"""A depot whose name attacks, a promise whose name climbs: through every page and every answer of the API."""

from __future__ import annotations

import csv
import io
import json
import unicodedata

import pytest
from structlog.testing import capture_logs
from web.test_pages import read
from web.world import FOREIGN, HOSTILE, HOSTILE_PROMISE

from watcher.report import charts
from watcher.web import reading
from watcher.web.places import from_segment, promise_path, slice_path

PATH = promise_path(HOSTILE_PROMISE, "..")
SLICE = slice_path(HOSTILE_PROMISE, "..", "depot", HOSTILE)
PAGES = (
    "/",
    PATH,
    SLICE,
    "/events",
    "/risk",
    "/reports",
    "/sign-in",
    "/?q=%3Cscript%3E",
    "/events?promise=%22%3E%3Cimg%3E",
)


def clean(text: str) -> bool:
    """No control, no invisible and no direction-turning character but line ends."""
    return not {c for c in text if unicodedata.category(c) in ("Cc", "Cf", "Cs", "Co", "Cn") and c not in "\n\r"}


@pytest.mark.parametrize("path", PAGES)
def test_no_page_lets_a_name_out(hostile, path):
    """The names stand on the pages as text: no element, attribute, control character or overlong word comes of them."""
    answer = hostile.client(hostile.act).get(path)
    page = read(hostile.client(), path)

    assert answer.status_code == 200
    assert clean(answer.text)
    for raw in ("<img src=x", "<svg/onload", "</script><img", "<b>\"'", "%3Cscript%3E<", "<script>"):
        assert raw not in answer.text
    assert "A" * 100 not in answer.text
    assert not [a for tag, a in page.tags if any(key.startswith("on") for key in a)]
    assert not [tag for tag, _ in page.tags if tag in ("img", "b", "iframe", "object")]


def test_the_names_are_really_there(hostile):
    """The attack is on the pages, readable, and its promise and slice have addresses that lead to them."""
    client = hostile.client()

    assert "\\x1b[31m" in read(client, PATH).text
    assert "\\u202e" in read(client, SLICE).text
    assert "<img src=x" in read(client, SLICE).text  # as text, after its escape is undone
    assert HOSTILE_PROMISE.replace("\\", "\\") in read(client, "/").text
    assert f'href="{PATH}"' in client.get("/").text
    assert not {".", "..", ""} & set(PATH.split("/")[1:])


def test_an_address_gives_its_name_back():
    """Slashes, dots, percent signs, quotes, half surrogates: what the router hands over is undone to the very name."""
    from urllib.parse import unquote

    for name in (HOSTILE_PROMISE, "..", ".", "a/b", "%2F", "100%", "ä ö", "\ud800", "?#&=+", "\\"):
        path = promise_path(name, "1")
        routed = unquote(path, errors="surrogatepass").split("/")

        assert [from_segment(each) for each in routed] == ["", "promises", name, "1"]


def test_the_api_gives_the_name_whole_and_harmless(hostile):
    """JSON holds the very name with all its characters escaped; CSV starts no formula and holds no control character."""
    client = hostile.client(hostile.act)
    found = client.get(f"/api/v1{PATH}").json()
    values = {row["slice"]["value"] for row in found["slices"]}
    assert HOSTILE in values
    for path in ("/api/v1/promises", f"/api/v1{PATH}", f"/api/v1{PATH}/history", f"/api/v1{PATH}/counts", "/api/v1/events",
                 "/api/v1/sources", "/api/v1/reports"):  # fmt: skip
        text = client.get(path + "?format=csv").text
        rows = list(csv.reader(io.StringIO(text)))

        assert clean(text.replace("\r\n", ""))
        assert not [cell for row in rows for cell in row if cell.lstrip(" ")[:1] in "=@\t\r" and cell.lstrip(" ")]
        assert len({len(row) for row in rows}) == 1
    rejects = client.get("/api/v1/rejects", params={"promise": HOSTILE_PROMISE})
    assert rejects.json()["samples"][0]["values"] == {"label": HOSTILE, "=1+1": None}
    table = client.get("/api/v1/rejects", params={"promise": HOSTILE_PROMISE, "format": "csv"}).text
    assert clean(table.replace("\r\n", ""))


def test_a_chart_of_it_holds_no_markup(hostile):
    """Specs are made of numbers and safe text, so that nothing in them ends a script or a picture."""
    stored = hostile.ledger.terms()[0]
    rows = reading.history(hostile.ledger, stored.terms, ("depot", HOSTILE))
    for kind in ("bounds", "total", "labels"):
        text = hostile.client().get(f"/api/v1{PATH}/charts/{kind}?slice={SLICE[-16:]}").text
        assert clean(text)
        assert clean("".join(json.loads(text)["description"]))
    assert clean(json.dumps(charts.slices([rows], stored.terms), ensure_ascii=False))


def test_refusals_log_hostile_paths_on_one_line(hostile):
    """What a foreigner writes into an address comes into the log without line ends and cut to a bearable length."""
    with capture_logs() as logs:
        hostile.client().get("/static/forged%1b[31m" + "x" * 3000)
        hostile.client().get("/%0d%0aforged%1b[31m%e2%80%ae" + "x" * 3000, headers={"Origin": FOREIGN})
    logged = [each["path"] for each in logs if each["event"] == "request refused"]

    assert len(logged) == 2
    assert all(clean(each) and "\n" not in each and len(each) <= 200 for each in logged)
