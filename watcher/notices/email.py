"""Notices by mail: STARTTLS, AUTH, text and HTML; temporary and permanent refusals told apart by the server's code."""

from __future__ import annotations

import smtplib
import ssl
from email import policy
from email.message import EmailMessage
from email.utils import format_datetime

from watcher.notices.base import Delivery, MailTarget, Message
from watcher.notices.pages import html, text
from watcher.notices.reply import excerpt
from watcher.text import mail_subject, safe


class MailSender:
    """Sends messages through one mail server. ValueError for an unusable CA file, at construction."""

    def __init__(self, target: MailTarget) -> None:
        self._target = target
        try:
            self._context = ssl.create_default_context(cafile=target.ca_file)
        except OSError as error:
            raise ValueError(f"ca_file = {target.ca_file!r}: cannot be used as certificates ({error})") from None

    def deliver(self, message: Message) -> Delivery:
        """Try once; what the server and the network do ends in the outcome, never in an exception."""
        mail = compose(message, self._target)
        try:
            with self._session() as server:
                refused = server.send_message(mail, self._target.sender, list(self._target.to))
        except smtplib.SMTPRecipientsRefused as error:
            return _all_refused(error.recipients)
        except (smtplib.SMTPSenderRefused, smtplib.SMTPDataError) as error:
            return _by_code(error.smtp_code, error.smtp_error)
        except smtplib.SMTPAuthenticationError as error:
            # A matter of configuration, which people mend within the seven days; no verdict on this message.
            return Delivery(
                "temporary", f"sign-in refused: {_reply(error.smtp_code, error.smtp_error)}", unreachable=True
            )
        except smtplib.SMTPResponseException as error:
            told = _reply(error.smtp_code, error.smtp_error)
            return Delivery("temporary", f"server refused the session: {told}", unreachable=True)
        except ssl.SSLCertVerificationError as error:
            return Delivery("temporary", f"certificate not trusted: {excerpt(error.verify_message)}", unreachable=True)
        except (smtplib.SMTPException, OSError) as error:
            return Delivery("temporary", f"{type(error).__name__}: {excerpt(str(error))}", unreachable=True)
        return _accepted(len(self._target.to), refused)

    def _session(self) -> smtplib.SMTP:
        target = self._target
        if target.security == "tls":
            server: smtplib.SMTP = smtplib.SMTP_SSL(
                target.host, target.port, timeout=target.timeout, context=self._context
            )
        else:
            server = smtplib.SMTP(target.host, target.port, timeout=target.timeout)
        try:
            if target.security == "starttls":
                # Raises where the server does not offer it: never in clear because somebody in between stripped it.
                server.starttls(context=self._context)
            if target.username is not None and target.password is not None:
                server.login(target.username, target.password)
        except BaseException:
            server.close()
            raise
        return server


def compose(message: Message, target: MailTarget) -> EmailMessage:
    """The mail of a message: the same Message-ID however often it is tried, so that mail programs show it once."""
    mail = EmailMessage(policy=policy.SMTP)
    mail["From"] = target.sender
    mail["To"] = ", ".join(target.to)
    mail["Subject"] = mail_subject(message.title)
    mail["Date"] = format_datetime(message.time)
    mail["Message-ID"] = f"<{message.id}@{target.sender.rpartition('@')[2]}>"
    mail["Auto-Submitted"] = "auto-generated"
    mail.set_content(text(message))
    mail.add_alternative(html(message), subtype="html")
    for attachment in message.attachments:
        main, _, sub = attachment.media_type.partition("/")
        mail.add_attachment(attachment.text.encode(), maintype=main, subtype=sub, filename=attachment.name)
    return mail


def _accepted(asked: int, refused: dict[str, tuple[int, bytes]]) -> Delivery:
    """At least one address took it. The others are named and not tried again: that would send to all of them anew."""
    told = f"taken for {asked - len(refused)} of {asked} addresses"
    for address, (code, reply) in sorted(refused.items()):
        told += f"; {safe(address)} refused: {_reply(code, reply)}"
    return Delivery("delivered", told)


def _all_refused(recipients: dict[str, tuple[int, bytes]]) -> Delivery:
    worst = min(recipients.values(), key=lambda answer: answer[0])
    return _by_code(*worst)


def _by_code(code: int, reply: bytes | str) -> Delivery:
    """5xx speaks of this very message or address and will not change; 4xx asks to come again (RFC 5321, 4.2.1)."""
    return Delivery("permanent" if 500 <= code < 600 else "temporary", _reply(code, reply))


def _reply(code: int, reply: bytes | str) -> str:
    return f"SMTP {code} {excerpt(reply)}"
