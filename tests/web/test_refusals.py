"""What must be refused is refused, with a reason in the log and nothing done."""

from __future__ import annotations

import http.client
import re
from typing import Any

import httpx
import pytest
from structlog.testing import capture_logs
from web.world import FOREIGN, Client, House, serving

from watcher.ledger.tokens import PREFIX
from watcher.web.access import FAILURES
from watcher.web.app import create_app

BODY = {"promise": "damage-photos", "version": "1", "breach": 1, "why": "looked at"}
FORM = "/promises/damage-photos/1/acknowledge"
WRONG = PREFIX + "x" * 43


def refusals(logs: list[Any]) -> list[str]:
    """The reasons of refused requests in a log."""
    return [each["reason"] for each in logs if each["event"] == "request refused"]


def operations(document: dict[str, Any]) -> list[tuple[str, str]]:
    """(method, path with every parameter filled in) of everything in an OpenAPI document."""
    values = {
        "name": "damage-photos",
        "version": "1",
        "chart": "bounds",
        "week": "2026-W10",
        "revision": "0",
        "file": "x",
    }
    return [
        (method.upper(), re.sub(r"{(\w+)}", lambda m: values[m.group(1)], path))
        for path, methods in document["paths"].items()
        for method in methods
    ]


def schema_of(house: House) -> dict[str, Any]:
    """The OpenAPI document."""
    return house.client(house.read).get("/api/v1/openapi.json").json()


def send(client: Client, method: str, path: str, **more: Any) -> httpx.Response:
    """A request that would be valid but for what the test makes of it."""
    return client.request(method, path, **({"json": BODY} if method == "POST" else {}), **more)


def test_the_schema_lists_every_route_of_the_api(demo):
    """What the app serves below /api/ and what its schema names are the same, so that tests over the schema see all."""
    app = create_app(demo.site)
    served = {
        (method, route.path)
        for route in _routes(app.routes)
        if route.path.startswith("/api/") and not route.path.endswith("openapi.json")
        for method in route.methods
    }
    named = {(m.upper(), path) for path, methods in schema_of(demo)["paths"].items() for m in methods}

    assert named == served
    assert ("POST", "/api/v1/acknowledgements") in named


def _routes(routes: Any) -> list[Any]:
    """The plain routes, also those of included routers."""
    found = []
    for route in routes:
        inner = getattr(route, "effective_candidates", None) or getattr(route, "routes", None)
        if inner is not None and not hasattr(route, "methods"):
            found += _routes(inner() if callable(inner) else inner)
        else:
            found.append(route)
    return found


def test_without_a_token_nothing_of_the_api_is_read_off_loopback(guarded):
    """Every operation of the schema answers 401 to a request without a token, and says how to come in."""
    client = guarded.client()
    for method, path in operations(schema_of(guarded)):
        with capture_logs() as logs:
            answer = send(client, method, path, headers={"Origin": client.origin})

        assert (answer.status_code, answer.headers.get("www-authenticate")) == (401, "Bearer"), path
        assert answer.headers["content-type"] == "application/problem+json"
        assert refusals(logs) == ["no-token"]
    assert guarded.acknowledged.seen == []


@pytest.mark.parametrize("path", ["/", "/promises/damage-photos/1", "/events", "/risk", "/reports", "/metrics"])
def test_without_a_token_no_page_is_read_off_loopback(guarded, path):
    """A page sends who is not signed in to the sign-in page, and says nothing of what it would have shown."""
    with capture_logs() as logs:
        answer = guarded.client().get(path)

    assert answer.status_code == (401 if path == "/metrics" else 303)
    assert "Cedar" not in answer.text
    assert refusals(logs) == ["no-token"]


@pytest.mark.parametrize("path", ["/healthz", "/readyz", "/sign-in", "/static/board.css"])
def test_health_and_sign_in_need_no_token(guarded, path):
    """What says nothing about promises is open, so that a probe and a person can get in."""
    assert guarded.client().get(path).status_code == 200


def test_a_revoked_token_opens_nothing(guarded):
    """From the moment it is revoked a token is refused on every operation, and its sessions are over."""
    signed = guarded.client()
    assert signed.form("/sign-in", {"token": guarded.act, "next": "/"}).status_code == 303
    assert signed.get("/").status_code == 200
    name = next(t.name for t in guarded.ledger.tokens.listed() if t.role == "act")
    operated = operations(schema_of(guarded))
    guarded.ledger.tokens.revoke(name, guarded.clock())
    client = guarded.client(guarded.act)
    for method, path in operated:
        guarded.clock.forward(minutes=10)
        with capture_logs() as logs:
            answer = send(client, method, path)

        assert answer.status_code == 401, path
        assert refusals(logs) == ["wrong-token"]
    assert signed.get("/").status_code == 303
    assert guarded.acknowledged.seen == []


@pytest.mark.parametrize("kind", ["demo", "guarded"])
def test_a_read_token_changes_nothing(request, kind):
    """Every mutating operation answers 403 to a token of the role read, in schema and board alike; so do raw rows."""
    house = request.getfixturevalue(kind)
    client = house.client(house.read)
    mutating = [each for each in operations(schema_of(house)) if each[0] != "GET"]
    assert mutating
    for method, path in [*mutating, ("GET", "/api/v1/rejects?promise=damage-photos")]:
        with capture_logs() as logs:
            answer = send(client, method, path)

        assert answer.status_code == 403, path
        assert refusals(logs) == ["role-act-needed"]
    answer = client.form(FORM, {"breach": "1", "why": "no"})

    assert answer.status_code == 403
    assert house.acknowledged.seen == []


def test_on_loopback_a_change_needs_a_token_too(demo):
    """Reading is free on loopback; every mutation and the raw rows are not."""
    client = demo.client()
    for method, path in operations(schema_of(demo)):
        answer = send(client, method, path, headers={"Origin": "http://localhost"})
        closed = method != "GET" or path.endswith("/rejects")

        assert (answer.status_code == 401) == closed, path
    assert client.form(FORM, {"breach": "1", "why": "no"}).status_code == 401
    assert demo.acknowledged.seen == []


@pytest.mark.parametrize(
    "host", ["evil.example", "localhost.evil.example", "localhost:8751", "127.0.0.1:1", "", "169.254.169.254"]
)
def test_a_foreign_host_is_refused(demo, host):
    """A name that is not served here gets no page, whatever it points at: a page of another site cannot rebind its name."""
    for path in ("/", "/api/v1/promises", "/metrics", "/static/board.css", "/healthz"):
        with capture_logs() as logs:
            answer = demo.client(demo.act).get(path, headers={"Host": host})

        assert answer.status_code == 421
        assert refusals(logs) == ["foreign-host"]


def test_hosts_of_the_configuration_are_served(demo_file):
    """A further host is answered with or without a port; loopback names only with the bound port."""
    from web.world import house

    served = house(demo_file, hosts=("board.example", "other.example:8443"))
    try:
        client = served.client()
        answers = {
            host: client.get("/healthz", headers={"Host": host}).status_code
            for host in ("board.example", "BOARD.example:9", "other.example:8443", "other.example", "localhost")
        }
    finally:
        served.ledger.close()

    assert answers == {
        "board.example": 200, "BOARD.example:9": 200, "other.example:8443": 200, "other.example": 421, "localhost": 200,
    }  # fmt: skip


@pytest.mark.parametrize(
    "origin",
    [FOREIGN, "null", "http://localhost:81", "https://localhost.evil.example", "file://", "http://localhost/x"],
)
def test_a_foreign_origin_is_refused(demo, origin):
    """A request from a page of another site is refused, with the right token too, reading and writing."""
    client = demo.client(demo.act)
    for method, path in (("POST", "/api/v1/acknowledgements"), ("GET", "/api/v1/promises"), ("POST", "/sign-out")):
        with capture_logs() as logs:
            answer = send(client, method, path, headers={"Origin": origin})

        assert answer.status_code == 403
        assert refusals(logs) == ["foreign-origin"]
        assert "access-control-allow-origin" not in answer.headers
    assert demo.acknowledged.seen == []


def test_a_form_without_an_origin_is_refused(demo):
    """A cookie alone changes nothing: the request must name this site as its origin, and a cross-site mark refuses it."""
    client = demo.client()
    client.form("/sign-in", {"token": demo.act, "next": "/"})
    for headers, reason in (
        ({}, "no-origin"),
        ({"Origin": "http://localhost", "Sec-Fetch-Site": "cross-site"}, "foreign-origin"),
    ):
        with capture_logs() as logs:
            answer = client.post(FORM, data={"breach": "1", "why": "no"}, headers=headers)

        assert answer.status_code == 403
        assert refusals(logs) == [reason]
    assert demo.acknowledged.seen == []


@pytest.mark.parametrize("name", ["token", "access_token", "Authorization", "anything"])
def test_a_token_in_the_address_is_refused(guarded, name):
    """A token in the query string is refused even if it is right, and is not written to the log."""
    for path in ("/", "/api/v1/promises", "/static/board.css"):
        with capture_logs() as logs:
            answer = guarded.client().get(path, params={name: guarded.act})

        assert answer.status_code == 400
        assert refusals(logs) == ["token-in-address"]
        assert guarded.act not in str(logs) + answer.text


def test_a_thousand_wrong_tokens_are_refused_and_soon_unread(guarded, monkeypatch):
    """Each of 1,000 wrong tokens is refused and logged; after the tenth the ledger is not even asked, until a minute is over."""
    client, asked = guarded.client(), []
    verify = guarded.ledger.tokens.verify
    monkeypatch.setattr(type(guarded.ledger.tokens), "verify", lambda self, token: asked.append(token) or verify(token))
    with capture_logs() as logs:
        answers = [
            client.get("/api/v1/promises", headers={"Authorization": f"Bearer {WRONG}{i}"}).status_code
            for i in range(1000)
        ]

    assert answers == [401] * FAILURES + [429] * (1000 - FAILURES)
    assert len(refusals(logs)) == 1000
    assert len(asked) == FAILURES
    assert WRONG not in str(logs)
    limited = client.get("/api/v1/promises", headers={"Authorization": f"Bearer {guarded.read}"})
    assert (limited.status_code, limited.headers["retry-after"]) == (429, "60")
    guarded.clock.forward(seconds=61)
    assert client.get("/api/v1/promises", headers={"Authorization": f"Bearer {guarded.read}"}).status_code == 200


def test_the_limit_is_by_address_and_covers_the_sign_in_page(guarded):
    """Failures of one address do not lock out another; the form counts like the header; a session goes on."""
    app = create_app(guarded.site)
    bad, good, signed = Client(app, {}, "203.0.113.9"), Client(app, {}, "203.0.113.10"), Client(app, {}, "203.0.113.9")
    assert signed.form("/sign-in", {"token": guarded.read, "next": "/"}).status_code == 303
    for i in range(FAILURES):
        assert bad.form("/sign-in", {"token": f"{WRONG}{i}", "next": "/"}).status_code == 401

    assert bad.form("/sign-in", {"token": guarded.read, "next": "/"}).status_code == 429
    assert good.form("/sign-in", {"token": guarded.read, "next": "/"}).status_code == 303
    assert signed.get("/").status_code == 200


@pytest.mark.parametrize("path", [
    "/static/../app.py", "/static/%2e%2e/app.py", "/static/..%2fapp.py", "/static/%252e%252e/app.py", "/static//etc/passwd",
    "/static/....//app.py", "/static/board.css%00.js", "/static/..\\app.py",
    "/reports/2026-W10/0/../../../../etc/passwd", "/reports/2026-W10/0/..%2f..%2fetc%2fpasswd", "/reports/..%2f..%2fetc/0/passwd",
    "/reports/2026-W10/0//etc/passwd", "/reports/2026-W10/-1/report.html", "/reports/2026-W10/9999999999/report.html",
    "/api/v1/reports/2026-W10/0/..%252f..%252fetc%252fpasswd",
])  # fmt: skip
def test_no_path_leads_out_of_static_and_report_files(demo, path):
    """A path that climbs is answered with 404 and logged; no file of the machine or the package is read."""
    demo.ledger.reports.add(
        "2026-W10", [("report.html", b"<p>week</p>")], head=demo.ledger.head(), created=demo.clock(), final=True
    )
    with serving(demo.site) as origin, capture_logs() as logs:
        # A client of the lowest kind, because others tidy dots away before they send.
        client = http.client.HTTPConnection(origin.removeprefix("http://"), timeout=30)
        client.request("GET", path)
        answer = client.getresponse()
        text = answer.read().decode()
        client.close()

    assert answer.status == 404
    assert "root:" not in text
    assert "create_app" not in text
    assert refusals(logs) == ["no-such-report" if "reports" in path else "no-such-file"]


def test_a_report_file_runs_nothing(demo):
    """An archived page is served as it was stored, in a sandbox without scripts; everything else is a download."""
    files = [("week.html", b"<script>1</script>"), ('a";\tX=é.csv', b"a,b"), ("x.svg", b"<svg/>")]
    demo.ledger.reports.add("2026-W10", files, head=demo.ledger.head(), created=demo.clock(), final=True)
    client = demo.client()
    page = client.get("/reports/2026-W10/0/week.html")
    table = client.get("/reports/2026-W10/0/a%22;%09X=%C3%A9.csv")
    other = client.get("/reports/2026-W10/0/x.svg")

    assert page.content == files[0][1]
    assert "sandbox" in page.headers["content-security-policy"]
    assert "script-src" not in page.headers["content-security-policy"]
    assert table.headers["content-disposition"] == 'attachment; filename="a___x09X__.csv"'
    assert other.headers["content-type"] == "application/octet-stream"


def test_a_body_that_is_too_long_is_refused(demo):
    """A long body is refused by its announced length, and cut off when its length was not announced."""
    client = demo.client(demo.act)
    with capture_logs() as logs:
        answer = client.post(
            "/api/v1/acknowledgements", content=b" " * 70_000, headers={"Content-Type": "application/json"}
        )

    assert answer.status_code == 413
    assert refusals(logs) == ["too-large"]

    async def pieces():
        for _ in range(20):
            yield b" " * 10_000

    assert client.post("/api/v1/acknowledgements", content=pieces()).status_code >= 400
    assert demo.acknowledged.seen == []


def test_no_answer_lacks_the_headers(demo):
    """Pages, files, problems and refusals all carry the policy; nothing of it allows eval, inline scripts or other sites."""
    client = demo.client()
    answers = [
        client.get(path, headers=headers)
        for path, headers in (
            ("/", {}), ("/nope", {}), ("/api/v1/promises", {}), ("/api/v1/nope", {}), ("/static/board.css", {}),
            ("/", {"Host": "evil.example"}), ("/metrics", {}),
        )
    ]  # fmt: skip
    for answer in answers:
        policy = answer.headers["content-security-policy"]

        assert "default-src 'none'" in policy
        assert "unsafe" not in policy
        assert "http" not in policy
        assert answer.headers["x-content-type-options"] == "nosniff"
        assert answer.headers["x-frame-options"] == "DENY"
        assert answer.headers["referrer-policy"] == "same-origin"


def test_no_page_is_read_by_a_method_that_changes(demo):
    """Pages answer to GET only, and nothing that changes answers to GET."""
    client = demo.client(demo.act)

    assert client.get(FORM).status_code == 405
    assert client.get("/sign-out").status_code == 405
    assert client.get("/api/v1/acknowledgements").status_code == 405
    assert client.post("/events", headers={"Origin": "http://localhost"}).status_code == 405
    assert demo.acknowledged.seen == []
