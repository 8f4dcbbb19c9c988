"""A real SMTP server (aiosmtpd) in a thread on a free loopback port: STARTTLS and AUTH, refusing what it is told to."""

from __future__ import annotations

import contextlib
import ssl
from collections.abc import Iterator
from email import message_from_bytes, policy
from email.message import EmailMessage
from typing import Any

from aiosmtpd.controller import Controller
from aiosmtpd.smtp import SMTP, AuthResult, Envelope, LoginPassword, Session

USERNAME, PASSWORD = "watcher", "correct horse"


class PostOffice:
    """Mails taken, and what to answer at RCPT (by address) and at DATA instead of taking them."""

    def __init__(self) -> None:
        self.mails: list[EmailMessage] = []
        self.raw: list[bytes] = []
        self.encrypted: list[bool] = []
        self.signed_in: list[bool] = []
        self.refuse_address: dict[str, str] = {}
        self.refuse_data: str | None = None
        self.port = 0

    async def handle_RCPT(
        self, server: SMTP, session: Session, envelope: Envelope, address: str, options: list[str]
    ) -> str:
        if address in self.refuse_address:
            return self.refuse_address[address]
        envelope.rcpt_tos.append(address)
        return "250 OK"

    async def handle_DATA(self, server: SMTP, session: Session, envelope: Envelope) -> str:
        if self.refuse_data is not None:
            return self.refuse_data
        content = envelope.content
        assert isinstance(content, bytes)
        self.raw.append(content)
        mail = message_from_bytes(content, policy=policy.default)
        assert isinstance(mail, EmailMessage)
        self.mails.append(mail)
        self.encrypted.append(session.ssl is not None)
        self.signed_in.append(session.authenticated)
        return "250 taken"


def _authenticate(server: SMTP, session: Session, envelope: Envelope, mechanism: str, data: Any) -> AuthResult:
    good = isinstance(data, LoginPassword) and (data.login, data.password) == (USERNAME.encode(), PASSWORD.encode())
    # handled=False makes aiosmtpd answer 535; with its default a refused client waits for its own time-out.
    return AuthResult(success=good, handled=False)


class _Controller(Controller):
    """On a port that the system chooses: the start-up probe of the package would connect to port 0."""

    def _trigger_server(self) -> None:
        assert self.server is not None
        self.port = self.server.sockets[0].getsockname()[1]
        super()._trigger_server()


@contextlib.contextmanager
def post_office(tls: ssl.SSLContext | None, *, implicit: bool = False) -> Iterator[PostOffice]:
    """Serve until the end of the block; without `tls` it offers no STARTTLS, `implicit` speaks TLS from the first byte."""
    office = PostOffice()
    controller = _Controller(
        office,
        hostname="127.0.0.1",
        port=0,
        server_hostname="localhost",
        ssl_context=tls if implicit else None,
        tls_context=None if implicit else tls,
        require_starttls=tls is not None and not implicit,
        authenticator=_authenticate if tls else None,
        auth_required=tls is not None and not implicit,
        # On a port of implicit TLS the package does not see that the line is encrypted: AUTH is offered, not required.
        auth_require_tls=not implicit,
    )
    controller.start()
    try:
        office.port = controller.port
        yield office
    finally:
        controller.stop()
