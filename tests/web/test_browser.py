"""The board in a real Chromium: nothing in the console, nothing from outside, by keyboard, in the dark, on a small screen."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from web import world
from web.world import HOSTILE, HOSTILE_PROMISE

from watcher.report.render import svg
from watcher.web.places import promise_path, slice_path

pytestmark = pytest.mark.peer("chromium")
SHOTS = Path(__file__).parents[2] / "artefacts" / "board"
"""Screenshots to look at; not kept in git."""
DEMO = (
    "/",
    "/promises/damage-photos/1",
    slice_path("damage-photos", "1", "depot", "Cedar"),
    "/events",
    "/risk",
    "/reports",
    "/sign-in",
)
HOSTILE_PAGES = (
    "/",
    promise_path(HOSTILE_PROMISE, ".."),
    slice_path(HOSTILE_PROMISE, "..", "depot", HOSTILE),
    "/events",
    "/risk",
)
NARROW = {"width": 360, "height": 740}


@pytest.fixture(scope="module")
def drawn(demo_file, tmp_path_factory):
    """The demo's board on a port, with drawn charts: (origin, house)."""
    house = world.house(Path(shutil.copy(demo_file, tmp_path_factory.mktemp("browser") / "w.db")), render=svg)
    house.ledger.reports.add(
        "2026-W24", [("2026-W24.html", b"<p>Week</p>")], head=house.ledger.head(), created=house.clock(), final=True
    )
    with world.serving(house.site) as origin:
        yield origin, house
    house.ledger.close()


@pytest.fixture(scope="module")
def attacked(hostile_file, tmp_path_factory):
    """The hostile board on a port."""
    house = world.house(Path(shutil.copy(hostile_file, tmp_path_factory.mktemp("browser") / "w.db")), render=svg)
    with world.serving(house.site) as origin:
        yield origin, house
    house.ledger.close()


def see(page, origin, path, name=None):
    """Open a page, scroll through it so that every chart is drawn, and keep a picture of it."""
    answer = page.goto(origin + path, wait_until="networkidle")
    assert answer.status == 200
    plots = page.locator(".plot[data-spec]")
    for i in range(plots.count()):
        plots.nth(i).scroll_into_view_if_needed()
        plots.nth(i).locator(".live svg").wait_for()
    page.evaluate("window.scrollTo(0, 0)")
    if name is not None:
        SHOTS.mkdir(parents=True, exist_ok=True)
        page.screenshot(path=SHOTS / f"{name}.png", full_page=True)


def fits(page) -> bool:
    """Nothing makes the page wider than the screen."""
    return page.evaluate("document.documentElement.scrollWidth <= window.innerWidth")


def name_of(path: str) -> str:
    return {"/": "overview", "/promises": "promise"}.get(
        path, path.strip("/").split("/")[0] if "slices" not in path else "slice"
    )


@pytest.mark.parametrize("path", DEMO)
def test_every_page_is_quiet_and_keeps_to_itself(chromium, drawn, path):
    """No error in the console and no request to anywhere else; charts answer the pointer under the strict policy."""
    origin, _ = drawn
    with chromium.visit() as (page, heard):
        see(page, origin, path, f"wide-{name_of(path)}")

        assert heard.errors == []
        assert heard.outside(origin) == []
        assert fits(page)


@pytest.mark.parametrize("path", HOSTILE_PAGES)
def test_a_hostile_name_does_nothing(chromium, attacked, path):
    """The names that attack are text: no dialog, no element, no error, no request, no page wider than a small screen."""
    origin, _ = attacked
    with chromium.visit(viewport=NARROW) as (page, heard):
        dialogs = []
        page.on("dialog", lambda dialog: (dialogs.append(dialog.message), dialog.dismiss()))
        see(page, origin, path, f"hostile-{name_of(path)}")

        assert dialogs == []
        assert heard.errors == []
        assert heard.outside(origin) == []
        assert page.locator("img, b, main svg[onload]").count() == 0
        assert fits(page)


@pytest.mark.parametrize("path", DEMO)
def test_it_fits_a_small_screen_in_the_dark(chromium, drawn, path):
    """At 360 pixels nothing sticks out; in the dark paper is dark and charts are drawn in the dark scheme."""
    origin, _ = drawn
    with chromium.visit(viewport=NARROW, color_scheme="dark") as (page, heard):
        see(page, origin, path, f"narrow-dark-{name_of(path)}")

        assert fits(page)
        assert heard.errors == []
        assert page.evaluate("getComputedStyle(document.documentElement).backgroundColor") == "rgb(20, 23, 26)"
        assert all("scheme=dark" in url for url in heard.requests if "/charts/" in url)


def test_without_scripts_everything_is_there(chromium, drawn):
    """With scripts off the drawn charts, their tables and every sentence stand in the page."""
    origin, _ = drawn
    with chromium.visit(java_script_enabled=False) as (page, heard):
        page.goto(origin + DEMO[1])
        SHOTS.mkdir(parents=True, exist_ok=True)
        page.screenshot(path=SHOTS / "no-script.png", full_page=True)

        assert page.locator("svg.drawn").count() == 4
        assert page.locator("figure table").count() == 3
        page.locator("summary").first.click()
        assert page.locator("figure table").first.is_visible()
        assert heard.errors == []


def test_a_chart_tells_its_figures_at_the_pointer(chromium, drawn):
    """Over the limits of the broken depot a box tells day, rate and limits; it goes when the pointer goes."""
    origin, _ = drawn
    with chromium.visit() as (page, heard):
        see(page, origin, DEMO[2])
        chart = page.locator("#bounds .live svg")
        chart.scroll_into_view_if_needed()
        box = chart.bounding_box()
        page.mouse.move(box["x"] + box["width"] * 0.5, box["y"] + box["height"] * 0.5, steps=4)
        tip = page.locator(".tip")
        tip.wait_for(state="visible")
        told = tip.inner_text()
        page.screenshot(path=SHOTS / "tooltip.png")
        page.mouse.move(2, 2)
        tip.wait_for(state="hidden")

        for word in ("counted up to", "since release", "lower limit", "upper limit", "labels", "2026"):
            assert word in told
        assert heard.errors == []


def test_every_chart_shows_its_lines(chromium, drawn):
    """The drawn and the live picture of a chart span the same width: the axis is right without eval, too."""
    origin, _ = drawn
    span = "(s) => { const b = [...s.querySelectorAll('path[stroke-width=\"1.8\"]')].map(p => p.getBBox().width); return Math.max(...b); }"
    with chromium.visit() as (page, _):
        see(page, origin, DEMO[1])
        live = page.locator("#bounds .live svg").evaluate(span)
        box = page.locator("#bounds .live svg").bounding_box()["width"]

        assert live > 0.6 * box


def test_the_keyboard_reaches_everything(chromium, drawn):
    """Tab reaches the skip link first, then every link, field, button, summary and scrolling region, each with a visible frame."""
    origin, _ = drawn
    with chromium.visit() as (page, _):
        see(page, origin, DEMO[1])
        wanted = page.evaluate(
            "[...document.querySelectorAll('a[href], button, input:not([type=hidden]):not([hidden]), select, textarea, summary, [tabindex=\"0\"]')]"
            ".filter(e => e.checkVisibility()).length"
        )
        page.keyboard.press("Tab")
        assert page.evaluate("document.activeElement.className") == "skip"
        reached = 1
        for _ in range(wanted + 5):
            page.keyboard.press("Tab")
            if page.evaluate("document.activeElement === document.body"):
                break
            reached += 1
            frame = page.evaluate("getComputedStyle(document.activeElement).outlineStyle")
            assert frame != "none", page.evaluate("document.activeElement.outerHTML.slice(0, 200)")

        assert reached >= wanted


def test_the_skip_link_leads_to_the_content(chromium, drawn):
    """The first key press and Enter pass over the head of the page."""
    origin, _ = drawn
    with chromium.visit() as (page, _):
        page.goto(origin + "/")
        page.keyboard.press("Tab")
        page.keyboard.press("Enter")

        assert page.evaluate("document.activeElement.id") == "main"


def test_acknowledging_with_and_without_the_right(chromium, drawn):
    """By keyboard alone: nobody and a reader find no form; who may act signs in, says why, and stands in the events."""
    origin, house = drawn
    promise = DEMO[1]
    with chromium.visit() as (page, heard):
        page.goto(origin + promise)
        assert page.locator("textarea").count() == 0
        _sign_in(page, house.read)
        assert page.url == origin + promise
        assert page.locator("textarea").count() == 0
        page.get_by_role("button", name="Sign out").press("Enter")
        page.goto(origin + promise)
        _sign_in(page, house.act)
        field = page.get_by_label("What was decided, or what is being done")
        if not field.is_visible():
            page.get_by_text("Acknowledge breach 1").press("Enter")
        field.press_sequentially("The camera was replaced.")
        page.keyboard.press("Tab")
        page.keyboard.press("Enter")
        page.wait_for_url(origin + promise + "#events")

        assert page.locator("#events p.muted", has_text="Acknowledged by maria-").count() == 1
        assert house.acknowledged.seen[-1][4] == "The camera was replaced."
        assert heard.errors == []
        assert page.evaluate("document.cookie") == ""


def _sign_in(page, token):
    page.get_by_role("link", name="Sign in", exact=True).first.press("Enter")
    page.get_by_label("Token").press_sequentially(token)
    page.keyboard.press("Enter")
    page.get_by_role("button", name="Sign out").wait_for()


def test_a_wrong_token_is_told(chromium, drawn):
    """The sign-in page says what is wrong where a screen reader hears it, and keeps the field."""
    origin, _ = drawn
    with chromium.visit() as (page, _):
        page.goto(origin + "/sign-in")
        page.get_by_label("Token").fill("watcher_wrong")
        page.keyboard.press("Enter")

        assert "unknown or revoked" in page.get_by_role("alert").inner_text()
        assert page.get_by_label("Token").get_attribute("aria-invalid") == "true"


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("path", ["/", DEMO[1], "/sign-in"])
def test_text_has_contrast(chromium, drawn, scheme, path):
    """Every text reaches 4.5:1 against what is behind it (WCAG 2 AA), in the light and in the dark."""
    origin, _ = drawn
    with chromium.visit(color_scheme=scheme) as (page, _):
        see(page, origin, path)
        weak = page.evaluate(CONTRAST)

        assert weak == []


CONTRAST = """() => {
  const parse = (c) => { const m = c.match(/[\\d.]+/g).map(Number); return m.length < 4 ? [...m, 1] : m; };
  const light = ([r, g, b]) => { const f = (v) => { v /= 255; return v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4; };
    return 0.2126 * f(r) + 0.7152 * f(g) + 0.0722 * f(b); };
  const behind = (e) => { for (let n = e; n; n = n.parentElement) { const c = parse(getComputedStyle(n).backgroundColor); if (c[3] > 0) return c; }
    return [255, 255, 255, 1]; };
  const weak = [];
  for (const e of document.querySelectorAll('body *')) {
    if (![...e.childNodes].some((n) => n.nodeType === 3 && n.textContent.trim())) continue;
    if (!e.checkVisibility() || e.closest('.away')) continue;
    const style = getComputedStyle(e);
    const svg = e.namespaceURI.endsWith('svg');
    if (svg && (style.fill === 'none' || e.tagName === 'title' || e.getAttribute('stroke-width') === '4')) continue;
    const [a, b] = [light(parse(svg ? style.fill : style.color)), light(behind(e))].sort((x, y) => y - x);
    const ratio = (a + 0.05) / (b + 0.05);
    if (ratio < 4.5) weak.push(`${ratio.toFixed(2)} ${e.tagName} ${e.textContent.slice(0, 40)}`);
  }
  return weak;
}"""


def test_it_prints(chromium, drawn):
    """On paper the drawn charts stand in place of the live ones and the controls are gone."""
    origin, _ = drawn
    with chromium.visit() as (page, heard):
        see(page, origin, DEMO[1])
        page.evaluate("window.dispatchEvent(new Event('beforeprint'))")
        page.emulate_media(media="print")
        SHOTS.mkdir(parents=True, exist_ok=True)
        page.pdf(path=SHOTS / "promise.pdf", format="A4")

        assert page.locator("svg.drawn").first.is_visible()
        assert not page.get_by_role("link", name="Sign in", exact=True).first.is_visible()
        assert heard.errors == []
