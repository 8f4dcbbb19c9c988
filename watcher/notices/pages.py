"""A message for people: plain text, and the same as HTML that needs nothing from outside."""

from __future__ import annotations

from collections.abc import Iterator
from html import escape

from watcher.notices.base import Item, Message
from watcher.wording import CAUTIONS


def text(message: Message) -> str:
    """The message as plain text."""
    parts = [message.title, ""]
    for item, now in _told_once(message):
        parts.append(item.sentence)
        parts += [f"{name}: {said}" for name, said in _lines(item, now) if said]
        parts += [f"Key: {item.key}", ""]
    return "\n".join([*parts, _foot(message), CAUTIONS, ""])


def html(message: Message) -> str:
    """The message as HTML; every text in it is escaped."""
    items = "\n".join(_item(item, now) for item, now in _told_once(message))
    return (
        '<!doctype html>\n<html lang="en"><head><meta charset="utf-8">'
        f"<title>{escape(message.title)}</title></head>\n"
        '<body style="font-family: sans-serif; max-width: 40em; line-height: 1.5">\n'
        f'<h1 style="font-size: 1.3em">{escape(message.title)}</h1>\n{items}\n'
        f'<p style="color: #555; overflow-wrap: anywhere">{escape(_foot(message))}<br>{escape(CAUTIONS)}</p>\n</body></html>\n'
    )


def _told_once(message: Message) -> Iterator[tuple[Item, str]]:
    """Every item with where things stand; several events of one promise need that paragraph once only."""
    seen: set[str] = set()
    for item in message.items:
        yield item, "" if item.now in seen else item.now
        seen.add(item.now)


def _lines(item: Item, now: str) -> tuple[tuple[str, str], ...]:
    return (("Now", now), ("What to do", item.advice), ("Where to look", item.where))


def _item(item: Item, now: str) -> str:
    lines = "".join(f"<br><em>{name}:</em> {_linked(said)}" for name, said in _lines(item, now) if said)
    return f"<p><strong>{escape(item.sentence)}</strong>{lines}<br><small>Key: {escape(item.key)}</small></p>"


def _linked(said: str) -> str:
    """Only what is a web address and nothing else becomes a link."""
    shown = escape(said)
    whole = said.startswith(("http://", "https://")) and " " not in said
    return f'<a href="{shown}">{shown}</a>' if whole else shown


def _foot(message: Message) -> str:
    return f"Look {message.look}, head {message.head}. Message {message.id}."
