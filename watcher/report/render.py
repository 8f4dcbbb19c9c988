"""Specs drawn as SVG or PNG. Costs some 100 MB and half a second at first: the daemon calls it in a child process."""

from __future__ import annotations

import re
from html import escape
from typing import Any, Final

VEGA_LITE: Final = "6.4"
"""The version of the language that the specs are written in; given explicitly, so that an upgrade changes no picture."""

_ID: Final = re.compile(r'\bid="([^"]+)"')
_USE: Final = re.compile(r'(\bid="|url\(#|href="#)([^")]+)')
_DOCTYPE: Final = re.compile(r"^\s*(<\?xml[^>]*\?>)?\s*(<!DOCTYPE[^>]*>)?\s*")


def svg(spec: dict[str, Any], prefix: str = "") -> str:
    """A spec as SVG text; the same spec gives the same bytes.

    `prefix` (letters and digits) goes before every id inside, so that several pictures can stand in one page.
    """
    import vl_convert

    drawn = vl_convert.vegalite_to_svg(spec, vl_version=VEGA_LITE)
    # Drawn without a page there is nobody to hang the description on: it is the picture's name for screen readers.
    named = f'<svg role="img" aria-label="{escape(str(spec.get("description", "")))}" '
    drawn = _DOCTYPE.sub("", drawn, count=1).replace("<svg ", named, 1)
    # The renderer numbers its ids on from picture to picture: numbered afresh they do not depend on what was drawn before.
    names = {name: f"{prefix}i{n}" for n, name in enumerate(dict.fromkeys(_ID.findall(drawn)))}
    return _USE.sub(lambda found: found.group(1) + names.get(found.group(2), found.group(2)), drawn)


def png(spec: dict[str, Any], scale: float = 2.0) -> bytes:
    """A spec as a PNG picture, `scale` pixels to a point."""
    import vl_convert

    return vl_convert.vegalite_to_png(spec, vl_version=VEGA_LITE, scale=scale)
