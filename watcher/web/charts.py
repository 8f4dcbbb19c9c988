"""Charts of a cell: specs for the script, drawn pictures for everybody, kept by the look they show."""

from __future__ import annotations

import re
import threading
from collections import OrderedDict
from collections.abc import Callable, Hashable
from typing import Final

import structlog
from markupsafe import Markup

from watcher.errors import WatcherError
from watcher.report.charts import THEMES, Spec
from watcher.text import safe

_KEPT: Final = 256
_ID: Final = re.compile(r'\bid="([^"]+)"')
_USE: Final = re.compile(r'(url\(#|href="#)([^")]+)')
_CLASS: Final = re.compile(r'^(<svg[^>]*?) class="[^"]*"')
_ROLES: Final = {
    THEMES["light"].paper: "paper",
    THEMES["light"].ink: "ink",
    THEMES["light"].muted: "muted",
    THEMES["light"].grid: "grid",
    THEMES["light"].accent: "accent",
}
"""Colours of the drawn picture and the page's own colours that take their place, so that one picture fits light and dark."""
log = structlog.get_logger("watcher.web")


class Gallery:
    """Drawn charts by (what, look): a picture is drawn once for each look that changed it."""

    def __init__(self, render: Callable[[Spec], str] | None) -> None:
        self._render = render
        self._kept: OrderedDict[Hashable, Markup] = OrderedDict()
        self._lock = threading.Lock()

    def picture(self, key: Hashable, prefix: str, spec: Callable[[], Spec]) -> Markup | None:
        """Inline SVG; None when nothing draws here, or the drawing failed: the table behind it is always there.

        `prefix` (letters, digits, -) goes before every id inside.
        """
        if self._render is None:
            return None
        with self._lock:
            if key in self._kept:
                self._kept.move_to_end(key)
                return self._kept[key]
        try:
            drawn = inline(self._render(spec()), prefix)
        except (WatcherError, OSError, ValueError) as error:
            log.warning("chart not drawn", error=type(error).__name__, detail=safe(str(error), 200))
            return None
        with self._lock:
            self._kept[key] = drawn
            while len(self._kept) > _KEPT:
                self._kept.popitem(last=False)
        return drawn


def inline(svg: str, prefix: str) -> Markup:
    """A drawn chart made fit to stand in a page: ids of its own, the page's colours, as wide as there is room.

    Ids are numbered anew: the engine counts them up from picture to picture.
    """
    names = {name: f"{prefix}-{n}" for n, name in enumerate(dict.fromkeys(_ID.findall(svg)))}
    svg = _ID.sub(lambda m: f'id="{names[m.group(1)]}"', svg)
    svg = _USE.sub(lambda m: m.group(1) + names.get(m.group(2), m.group(2)), svg)
    for colour, role in _ROLES.items():
        svg = svg.replace(f'"{colour}"', f'"var(--{role})"')
    # Width, height and the rest of its look are the style sheet's, by this class.
    svg = _CLASS.sub(r"\1", svg.strip(), count=1).replace("<svg", '<svg class="drawn"', 1)
    return Markup(svg)  # noqa: S704 - numbers and safe text, drawn by our own renderer
