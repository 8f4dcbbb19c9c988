"""A message for people: plain text, and the same as HTML that needs nothing from outside."""

from __future__ import annotations

from html import escape

from watcher.notices.base import Item, Message
from watcher.wording import CAUTIONS


def text(message: Message) -> str:
    """The message as plain text."""
    parts = [message.title, ""]
    for item in message.items:
        parts += [item.sentence, *([f"Now: {item.now}"] if item.now else []), f"What to do: {item.advice}"]
        parts += [f"Where to look: {item.where}"] if item.where else []
        parts += [f"Key: {item.key}", ""]
    return "\n".join([*parts, _foot(message), CAUTIONS, ""])


def html(message: Message) -> str:
    """The message as HTML; every text in it is escaped."""
    items = "\n".join(_item(item) for item in message.items)
    return (
        '<!doctype html>\n<html lang="en"><head><meta charset="utf-8">'
        f"<title>{escape(message.title)}</title></head>\n"
        '<body style="font-family: sans-serif; max-width: 40em; line-height: 1.5">\n'
        f"<h1>{escape(message.title)}</h1>\n{items}\n"
        f'<p style="color: #555; overflow-wrap: anywhere">{escape(_foot(message))}<br>{escape(CAUTIONS)}</p>\n</body></html>\n'
    )


def _item(item: Item) -> str:
    where = ""
    # Only web addresses become links: a configured address is trusted, but a link is followed by a click.
    if item.where.startswith(("http://", "https://")):
        where = f'<br>Where to look: <a href="{escape(item.where)}">{escape(item.where)}</a>'
    now = f"<br>Now: {escape(item.now)}" if item.now else ""
    return (
        f"<p><strong>{escape(item.sentence)}</strong>{now}<br>What to do: {escape(item.advice)}{where}<br>"
        f"<small>Key: {escape(item.key)}</small></p>"
    )


def _foot(message: Message) -> str:
    return f"Look {message.look}, head {message.head}. Message {message.id}."
