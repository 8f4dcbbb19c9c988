"""Chromium through Playwright: pages as people get them, with everything that the console says and every request."""

from __future__ import annotations

import importlib.util
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

import pytest

PROGRAMS = ("chromium", "chromium-browser", "google-chrome")
ARGUMENTS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    # Without these it keeps trying to reach its maker.
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]


def program() -> str | None:
    """The path of an installed Chromium."""
    return next((found for name in PROGRAMS if (found := shutil.which(name))), None)


def missing() -> str | None:
    """What a browser test lacks here; None when it can run."""
    if program() is None:
        return "chromium is not installed (apt-get install chromium)"
    if importlib.util.find_spec("playwright") is None:
        return "playwright is not installed (pip install playwright)"
    return None


@dataclass
class Heard:
    """What happened in a browser while pages were looked at."""

    errors: list[str] = field(default_factory=list)
    """Console errors and uncaught exceptions."""
    warnings: list[str] = field(default_factory=list)
    requests: list[str] = field(default_factory=list)

    def outside(self, origin: str) -> list[str]:
        """Requests that left for another origin."""
        return [url for url in self.requests if not url.startswith((f"{origin}/", "data:", "about:"))]


class Chromium:
    """One browser; every visit is a fresh profile."""

    def __init__(self, browser: Any) -> None:
        self._browser = browser

    @contextmanager
    def visit(self, **options: Any) -> Iterator[tuple[Any, Heard]]:
        """A page in a profile of its own, and what is heard of it; `options` are those of a browser context."""
        context = self._browser.new_context(**{"viewport": {"width": 1280, "height": 900}, **options})
        heard = Heard()
        page = context.new_page()
        page.on("console", lambda message: _note(heard, message.type, message.text))
        page.on("pageerror", lambda error: heard.errors.append(str(error)))
        page.on("request", lambda request: heard.requests.append(request.url))
        page.set_default_timeout(30_000)
        try:
            yield page, heard
        finally:
            context.close()


def _note(heard: Heard, kind: str, text: str) -> None:
    if kind == "error":
        heard.errors.append(text)
    elif kind == "warning":
        heard.warnings.append(text)


# Of a module: while it runs, Playwright keeps an event loop in this thread, which other tests want for themselves.
@pytest.fixture(scope="module")
def chromium() -> Iterator[Chromium]:
    """A running Chromium."""
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=program(), args=ARGUMENTS)
        yield Chromium(browser)
        browser.close()
