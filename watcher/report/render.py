"""Specs drawn as SVG or PNG. Costs some 100 MB and half a second at first: the daemon calls it in a child process."""

from __future__ import annotations

import re
from typing import Any, Final

VEGA_LITE: Final = "6.4"
"""The version of the language that the specs are written in; given explicitly, so that an upgrade changes no picture."""

_ID: Final = re.compile(r'(\bid="|url\(#|href="#)')
_DOCTYPE: Final = re.compile(r"^\s*(<\?xml[^>]*\?>)?\s*(<!DOCTYPE[^>]*>)?\s*")


def svg(spec: dict[str, Any], prefix: str = "") -> str:
    """A spec as SVG text; the same spec gives the same bytes.

    `prefix` (letters and digits) goes before every id inside, so that several pictures can stand in one page.
    """
    import vl_convert

    drawn = vl_convert.vegalite_to_svg(spec, vl_version=VEGA_LITE)
    drawn = _DOCTYPE.sub("", drawn, count=1)
    return _ID.sub(lambda found: f"{found.group(1)}{prefix}", drawn) if prefix else drawn


def png(spec: dict[str, Any], scale: float = 2.0) -> bytes:
    """A spec as a PNG picture, `scale` pixels to a point."""
    import vl_convert

    return vl_convert.vegalite_to_png(spec, vl_version=VEGA_LITE, scale=scale)
