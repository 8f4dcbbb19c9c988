"""Charts and report in a real browser, under a policy that forbids inline script and evaluation."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

import pytest
import vl_convert
from playwright.sync_api import Browser, ConsoleMessage, sync_playwright
from report.world import make_snapshot
from wording.invented import HOSTILE

from watcher.report import charts, render
from watcher.report.page import as_html
from watcher.report.weekly import weekly
from watcher.text import script_json

pytestmark = pytest.mark.peer("chromium")

POLICY = "default-src 'none'; script-src 'self'; style-src 'self' 'unsafe-inline'; img-src 'self' data:"
QUIET = (
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)


def specs() -> dict[str, Any]:
    promise = make_snapshot(("Alder", HOSTILE, "Cedar")).promises[0]
    cedar = promise.history["depot", "Cedar"]
    days = charts.daily(promise.counts, cedar, promise.terms, promise.sealed_until)
    return {
        "bounds": charts.bounds(cedar, promise.terms, width="container", tips=True),
        "total": charts.total(cedar, promise.terms, width="container", tips=True),
        "labels": charts.labels(days, width="container", tips=True),
        "slices": charts.slices([rows for key, rows in promise.history.items() if key[0]], promise.terms),
        "empty": charts.bounds((), promise.terms, width="container", tips=True),
    }


def files(report: str) -> dict[str, tuple[str, str]]:
    places = "".join(f'<div id="{name}" style="width:100%"></div>' for name in specs())
    head = '<link rel="icon" href="data:,"><script type="module" src="vega.js"></script><script type="module" src="go.js"></script>'
    go = (
        f"const specs = {script_json(specs())}; for (const [name, spec] of Object.entries(specs)) "
        "await vegaEmbed('#' + name, spec, {ast: true, actions: false, renderer: 'svg'}); window.done = true;"
    )
    return {
        "/": (f"<!doctype html><html><head>{head}</head><body>{places}</body></html>", "text/html"),
        "/vega.js": (vl_convert.javascript_bundle(vl_version=render.VEGA_LITE), "text/javascript"),
        "/go.js": (go, "text/javascript"),
        "/report": (report, "text/html"),
    }


@pytest.fixture(scope="module")
def address() -> Iterator[str]:
    known = files(as_html(weekly(make_snapshot(("Alder", HOSTILE, "Cedar")))))

    class Handler(BaseHTTPRequestHandler):
        def do_GET(self) -> None:
            found = known.get(self.path)
            self.send_response(200 if found else 404)
            self.send_header("Content-Security-Policy", POLICY)
            self.send_header("Content-Type", f"{found[1] if found else 'text/plain'}; charset=utf-8")
            self.end_headers()
            self.wfile.write(found[0].encode() if found else b"")

        def log_message(self, *args: Any) -> None:
            """Say nothing."""

    server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield f"http://127.0.0.1:{server.server_port}"
    server.shutdown()
    thread.join()
    server.server_close()


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    with sync_playwright() as playwright:
        started = playwright.chromium.launch(executable_path="/usr/bin/chromium", args=list(QUIET))
        yield started
        started.close()


@pytest.mark.parametrize("width", [360, 900])
def test_charts_draw_without_a_complaint(browser: Browser, address: str, width: int) -> None:
    """Drawn by script under a strict policy: no message in the console, a name for screen readers, figures at the pointer."""
    page = browser.new_page(viewport={"width": width, "height": 1400})
    said: list[str] = []
    page.on("console", lambda message: said.append(message.text))
    page.on("pageerror", lambda error: said.append(str(error)))
    page.goto(address)
    page.wait_for_function("window.done === true", timeout=60_000)
    box = page.locator("#bounds svg").bounding_box()
    assert box is not None
    page.mouse.move(box["x"] + box["width"] * 0.3, box["y"] + box["height"] * 0.6)
    tip = page.locator("#vg-tooltip-element")
    tip.wait_for()
    told = tip.inner_text()
    page.close()

    assert said == []
    assert box["width"] <= width
    assert " November 2026" in told
    assert "undefined" not in told


def test_the_report_is_quiet(browser: Browser, address: str) -> None:
    """The report makes one request, that for itself, runs no script, and stays within a narrow window."""
    page = browser.new_page(viewport={"width": 360, "height": 800})
    said: list[ConsoleMessage] = []
    asked: list[str] = []
    page.on("console", lambda message: said.append(message))
    page.on("request", lambda request: asked.append(request.url))
    page.goto(f"{address}/report")
    wide = page.evaluate("document.documentElement.scrollWidth")
    scripts = page.evaluate("document.scripts.length")
    page.close()

    assert [message.text for message in said] == []
    assert [url for url in asked if not url.endswith("/favicon.ico")] == [f"{address}/report"]
    assert scripts == 0
    assert wide <= 360


def test_the_report_opens_from_a_file(browser: Browser, tmp_path: Path) -> None:
    """Opened from disk, without any server, it draws its pictures."""
    path = tmp_path / "report.html"
    path.write_text(as_html(weekly(make_snapshot())), encoding="utf-8")
    page = browser.new_page()
    page.goto(path.as_uri())
    drawn = page.locator("figure svg").count()
    names = page.locator("figure svg").evaluate_all("all => all.map(each => each.getAttribute('aria-label'))")
    page.close()

    assert drawn == 6
    assert all(names)
