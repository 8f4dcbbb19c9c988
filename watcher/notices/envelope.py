"""A message as JSON: a CloudEvents 1.0 structured envelope, and its Standard Webhooks signature.

Both are a few lines by our own hand; the tests hold them against independent packages.
"""

from __future__ import annotations

import base64
import binascii
import hashlib
import hmac
import json
import math
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from typing import Any, Final

from watcher.notices.base import Item, Message

CONTENT_TYPE: Final = "application/cloudevents+json; charset=utf-8"
_SHORTEST, _LONGEST = 24, 64
"""Bytes of a secret, as Standard Webhooks asks."""


def rfc3339(time: datetime) -> str:
    """An aware time as RFC 3339 in UTC, whole seconds."""
    return time.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def envelope(message: Message) -> dict[str, Any]:
    """The eight keys of the envelope; `id` and `source` together are unique for what is told, not for the try."""
    return {
        "specversion": "1.0",
        "id": message.id,
        "source": message.source,
        "type": message.type,
        "subject": message.subject,
        "time": rfc3339(message.time),
        "datacontenttype": "application/json",
        "data": data(message),
    }


def data(message: Message) -> dict[str, Any]:
    """What the message says, as JSON."""
    told: dict[str, Any] = {
        "route": message.route,
        "title": message.title,
        "look": message.look,
        "head": str(message.head),
        "keys": [item.key for item in message.items],
        "notices": [_item(item) for item in message.items],
        "standings": [finite(standing) for standing in message.standings],
    }
    if message.attachments:
        told["evidence"] = {
            attachment.name: json.loads(attachment.text)
            if attachment.media_type == "application/json"
            else attachment.text
            for attachment in message.attachments
        }
    return told


def body(message: Message) -> bytes:
    """The very bytes that are sent and signed."""
    return json.dumps(envelope(message), ensure_ascii=False, allow_nan=False, separators=(",", ":")).encode()


def signature(secrets: Sequence[str], message_id: str, timestamp: int, payload: bytes) -> str:
    """The `webhook-signature` header: one `v1` signature for each secret, separated by spaces.

    `timestamp` in whole seconds since 1970. ValueError where a secret is not `whsec_` + base64 of 24 to 64 bytes.
    """
    signed = b"%s.%d.%s" % (message_id.encode(), timestamp, payload)
    digests = (hmac.new(secret_bytes(secret), signed, hashlib.sha256).digest() for secret in secrets)
    return " ".join("v1," + base64.b64encode(digest).decode() for digest in digests)


def secret_bytes(secret: str) -> bytes:
    """The key inside a secret. ValueError, which never repeats the secret, where it is not usable."""
    try:
        key = base64.b64decode(secret.removeprefix("whsec_"), validate=True)
    except (binascii.Error, ValueError):
        raise ValueError("secret: is not base64 after 'whsec_'; make one with `openssl rand -base64 32`") from None
    if not _SHORTEST <= len(key) <= _LONGEST:
        raise ValueError(
            f"secret: has {len(key)} bytes, allowed are {_SHORTEST} to {_LONGEST}; "
            f"make one with `openssl rand -base64 32`"
        )
    return key


def _item(item: Item) -> dict[str, Any]:
    return {
        "key": item.key,
        "kind": item.kind,
        "promise": item.promise or None,
        "version": item.version or None,
        "slice": {"column": item.column, "value": item.value} if item.column else None,
        "at": rfc3339(item.at),
        "sentence": item.sentence,
        "now": item.now or None,
        "advice": item.advice,
        "where": item.where or None,
        "facts": finite(item.facts),
    }


def finite(value: Any) -> Any:
    """The same with null for infinities and NaN, which JSON does not know (a total before the first label is -inf)."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): finite(inner) for key, inner in value.items()}
    if isinstance(value, list | tuple):
        return [finite(inner) for inner in value]
    return value
