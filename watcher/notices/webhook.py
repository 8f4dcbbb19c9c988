"""Notices to an HTTP receiver: one signed POST, TLS verified, redirects not followed, one deadline for everything."""

from __future__ import annotations

import asyncio
import ssl
from collections.abc import Callable
from datetime import datetime
from typing import Final

import httpx

from watcher.notices.base import Delivery, Message, WebhookTarget
from watcher.notices.envelope import CONTENT_TYPE, body, secret_bytes, signature
from watcher.notices.reply import excerpt, read_answer

_READ: Final = 65536
"""Bytes of an answer that are read; the rest is not wanted."""
_GONE: Final = 410


class WebhookSender:
    """Posts messages to one receiver.

    `clock` stamps the signature; receivers refuse stamps that are more than some minutes off, so it is the clock of the
    moment of sending, not that of the event. ValueError for an unusable secret or CA file, at construction.
    """

    def __init__(self, target: WebhookTarget, clock: Callable[[], datetime]) -> None:
        for secret in target.secrets:
            secret_bytes(secret)
        self._target = target
        self._clock = clock
        try:
            self._context = ssl.create_default_context(cafile=target.ca_file)
        except OSError as error:
            raise ValueError(f"ca_file = {target.ca_file!r}: cannot be used as certificates ({error})") from None

    def deliver(self, message: Message) -> Delivery:
        """Try once; what the receiver and the network do ends in the outcome, never in an exception.

        To be called from a thread without an event loop of its own.
        """
        # A coroutine, because only so one deadline covers handshake, a dripping header and the body. A name look-up that
        # hangs is given up at the deadline, too, but its thread is waited for until the resolver's own time-out.
        return asyncio.run(self._within(message))

    async def _within(self, message: Message) -> Delivery:
        try:
            async with asyncio.timeout(self._target.timeout):
                status, payload = await self._post(message)
        except TimeoutError:
            return Delivery("temporary", f"no answer within {self._target.timeout:g} s", unreachable=True)
        except httpx.TransportError as error:
            return Delivery("temporary", f"{_told(error)}", unreachable=True)
        except (httpx.HTTPError, httpx.InvalidURL, ValueError) as error:
            return Delivery("temporary", f"request failed: {type(error).__name__}", unreachable=True)
        return judge(status, payload)

    async def _post(self, message: Message) -> tuple[int, bytes]:
        payload = body(message)
        target = self._target
        client = httpx.AsyncClient(
            verify=self._context,
            # Not the environment's proxies and .netrc: what leaves this machine is what the configuration says.
            trust_env=False,
            follow_redirects=False,
            timeout=target.timeout,
        )
        async with (
            client,
            client.stream("POST", target.url, content=payload, headers=self._headers(message, payload)) as r,
        ):
            return r.status_code, await _beginning(r)

    def _headers(self, message: Message, payload: bytes) -> dict[str, str]:
        stamp = int(self._clock().timestamp())
        headers = {
            "content-type": CONTENT_TYPE,
            "user-agent": "watcher",
            # The raw bytes are read, so that no answer can unfold into more than was sent.
            "accept-encoding": "identity",
            "webhook-id": message.id,
            "webhook-timestamp": str(stamp),
        }
        if self._target.secrets:
            headers["webhook-signature"] = signature(self._target.secrets, message.id, stamp, payload)
        return headers


def judge(status: int, payload: bytes) -> Delivery:
    """What an HTTP status and the beginning of the body mean for a notice.

    2xx: delivered, with a retraining receiver's answer if there is one. 410: the receiver wants no more of this route.
    Another 4xx whose body says `"status": "refused"`: permanent. Everything else, redirects included, is tried again:
    receivers get mended within the seven days, and a breach that is told late is better than one that is lost.
    """
    said, reference = read_answer(payload)
    told = f"HTTP {status}"
    if httpx.codes.is_success(status):
        return Delivery("delivered", told, status=said, reference=reference)
    if status == _GONE:
        return Delivery("gone", f"{told}: the receiver ended this route")
    if httpx.codes.is_client_error(status) and said == "refused":
        return Delivery("permanent", told, status=said, reference=reference)
    if httpx.codes.is_redirect(status):
        return Delivery("temporary", f"{told}: redirects are not followed; write the final address", unreachable=True)
    body_told = excerpt(payload)
    unreachable = httpx.codes.is_server_error(status) or status == httpx.codes.TOO_MANY_REQUESTS
    return Delivery("temporary", f"{told}: {body_told}" if body_told else told, unreachable=unreachable)


async def _beginning(response: httpx.Response) -> bytes:
    read = b""
    async for part in response.aiter_raw():
        read += part
        if len(read) >= _READ:
            return read[:_READ]
    return read


def _told(error: httpx.TransportError) -> str:
    """A transport error in words that hold no url: chat receivers keep their secret in the path."""
    cause: BaseException | None = error
    while cause is not None:
        if isinstance(cause, ssl.SSLCertVerificationError):
            return f"certificate not trusted: {excerpt(cause.verify_message)}"
        cause = cause.__cause__ or cause.__context__
    return f"{type(error).__name__}: {excerpt(str(error))}" if str(error) else type(error).__name__
