"""Outside text, made safe for showing: slice values, ids, raw rows and messages of other programs are attackers' text."""

from __future__ import annotations

import json
import unicodedata
from typing import Any, Final

LIMIT: Final = 80
"""Characters that a page, a table or a sentence shows of one outside text."""
SUBJECT: Final = 200
"""Characters of a mail subject."""

# Controls, invisible formatting (among it the marks that turn the reading direction), lone surrogates, private use,
# unassigned, line and paragraph separators. Every space but U+0020 is treated alike: it looks like one and is none.
_UNSEEN: Final = frozenset({"Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp", "Zs"})
_FORMULA: Final = frozenset("=+-@\t\r\n＝＋－＠")  # a spreadsheet takes the full-width forms for the same signs
_MARKS: Final = frozenset({"Mn", "Me", "Mc"})
_STACK: Final = 4
"""Combining marks in a row that are drawn; more than any written language needs would climb over the lines above."""


def safe(text: str, limit: int | None = LIMIT) -> str:
    r"""Outside text on one line: what cannot be seen as \xNN, cut to `limit` characters, the last one then "…".

    `limit` >= 1, or None for no cut. The result holds printable characters and plain spaces only; it is NOT escaped for
    HTML, which is the template's part. Code points beyond two hexadecimal digits are shown as \uNNNN or \UNNNNNNNN.
    """
    shown: list[str] = []
    room = limit
    marks = 0
    for character in text:
        marks = marks + 1 if unicodedata.category(character) in _MARKS else 0
        piece = _escaped(character) if marks > _STACK else _seen(character)
        if room is not None:
            if len(piece) > room:
                return _cut(shown, limit)
            room -= len(piece)
        shown.append(piece)
    return "".join(shown)


def csv_cell(value: object) -> str:
    """One cell of a CSV file: text is made safe at full length and never starts a formula; numbers stay as they are.

    None is an empty cell. Text that starts with = + - @ tab or CR (or with spaces before them) gets a leading '.
    """
    if value is None:
        return ""
    if not isinstance(value, str):
        return str(value)
    shown = safe(value, None)
    return "'" + shown if value.lstrip(" ")[:1] in _FORMULA and value.strip(" ") else shown


def mail_subject(text: str, limit: int = SUBJECT) -> str:
    """A mail subject: one line without CR, LF or any other control character, so that no header can be smuggled in."""
    return safe(" ".join(text.split()), limit)


def script_json(value: Any) -> str:
    """JSON that may stand inside a script element: no <, >, & and no line separator in it; NaN is refused (ValueError)."""
    text = json.dumps(value, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
    for sign in "<>&":
        text = text.replace(sign, f"\\u{ord(sign):04x}")
    return text


def _seen(character: str) -> str:
    if character == " " or unicodedata.category(character) not in _UNSEEN:
        return character
    return _escaped(character)


def _escaped(character: str) -> str:
    code = ord(character)
    if code <= 0xFF:
        return f"\\x{code:02x}"
    return f"\\u{code:04x}" if code <= 0xFFFF else f"\\U{code:08x}"


def _cut(pieces: list[str], limit: int | None) -> str:
    # An escape is kept whole or dropped whole: half of one would read as other text.
    assert limit is not None
    kept = list(pieces)
    while kept and sum(map(len, kept)) > limit - 1:
        kept.pop()
    return "".join(kept) + "…"
