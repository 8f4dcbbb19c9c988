"""The mail sender against a real SMTP server with STARTTLS and AUTH."""

from __future__ import annotations

import socket
import threading
from dataclasses import replace
from typing import Any

import pytest
from notices.conftest import Certificates
from notices.memory import T0, some_message
from peers.smtp import PASSWORD, USERNAME, PostOffice, post_office

from watcher.notices.base import Attachment, Delivery, MailTarget, Message
from watcher.notices.email import MailSender


def _target(office: PostOffice, certificates: Certificates, **changes: Any) -> MailTarget:
    target = MailTarget(
        host="localhost",
        port=office.port,
        sender="watcher@example.org",
        to=("desk@example.org", "lead@example.org"),
        username=USERNAME,
        password=PASSWORD,
        timeout=5,
        ca_file=certificates.trusted,
    )
    return replace(target, **changes)


def _send(office: PostOffice, certificates: Certificates, message: Message | None = None, **changes: Any) -> Delivery:
    return MailSender(_target(office, certificates, **changes)).deliver(message or some_message())


def test_a_mail_arrives_encrypted_and_signed_in_as_text_and_html(certificates: Certificates) -> None:
    """Both parts say the sentence, the key and the head."""
    with post_office(certificates.server) as office:
        delivery = _send(office, certificates)
        (mail,) = office.mails

        assert (office.encrypted, office.signed_in) == ([True], [True])
    parts = {part.get_content_type(): part.get_content() for part in mail.walk() if not part.is_multipart()}

    assert (delivery.outcome, delivery.answer) == ("delivered", "taken for 2 of 2 addresses")
    assert sorted(parts) == ["text/html", "text/plain"]
    assert all("It broke." in part and "k1" in part and "Look 7" in part for part in parts.values())
    assert (mail["To"], mail["Date"].datetime) == ("desk@example.org, lead@example.org", T0)


def test_the_message_id_is_the_same_at_every_try(certificates: Certificates) -> None:
    """So that mail programs show a mail once that was sent twice."""
    with post_office(certificates.server) as office:
        _send(office, certificates)
        _send(office, certificates)
        ids = {mail["Message-ID"] for mail in office.mails}

    assert ids == {f"<{some_message().id}@example.org>"}


def test_no_line_break_reaches_the_subject(certificates: Certificates) -> None:
    """A hostile title cannot add headers or recipients."""
    hostile = some_message(title="x\r\nBcc: thief@example.org\n\nbody")
    with post_office(certificates.server) as office:
        delivery = _send(office, certificates, hostile)
        (mail,) = office.mails

    assert (delivery.outcome, mail["Bcc"]) == ("delivered", None)
    assert mail["Subject"] == "x Bcc: thief@example.org body"


def test_hostile_text_is_escaped_in_the_html(certificates: Certificates) -> None:
    """Markup in a sentence stays text."""
    item = replace(some_message().items[0], sentence="<script>alert(1)</script>", where="javascript:alert(1)")
    with post_office(certificates.server) as office:
        _send(office, certificates, some_message(items=(item,), title="<b>"))
        page = office.mails[0].get_body(("html",))
    assert page is not None
    shown = page.get_content()

    assert "&lt;script&gt;" in shown
    assert "<script" not in shown
    assert "<b>" not in shown
    assert "href" not in shown


def test_the_evidence_is_attached(certificates: Certificates) -> None:
    """Files with their names and contents."""
    files = (Attachment("counts.csv", "text/csv", "a\n1\n"), Attachment("verdict.json", "application/json", "{}"))
    with post_office(certificates.server) as office:
        _send(office, certificates, some_message(attachments=files))
        found = [(part.get_filename(), part.get_content_type()) for part in office.mails[0].iter_attachments()]

    assert found == [("counts.csv", "text/csv"), ("verdict.json", "application/json")]


@pytest.mark.parametrize(
    ("reply", "outcome"),
    [
        ("451 4.3.0 come again", "temporary"),
        ("452 4.2.2 full", "temporary"),
        ("550 5.7.1 not wanted", "permanent"),
        ("552 5.3.4 too big", "permanent"),
    ],
)
def test_the_code_at_data_tells_temporary_from_permanent(certificates: Certificates, reply: str, outcome: str) -> None:
    """4xx is tried again, 5xx is not."""
    with post_office(certificates.server) as office:
        office.refuse_data = reply
        delivery = _send(office, certificates)

    assert (delivery.outcome, delivery.answer) == (outcome, f"SMTP {reply}")


@pytest.mark.parametrize(
    ("desk", "lead", "outcome", "mails"),
    [
        ("550 no such user", None, "delivered", 1),
        ("450 come again", None, "delivered", 1),
        ("550 no such user", "550 no such user", "permanent", 0),
        ("550 no such user", "450 come again", "temporary", 0),
    ],
)
def test_refused_addresses(certificates: Certificates, desk: str, lead: str | None, outcome: str, mails: int) -> None:
    """One address that takes the mail delivers it; all refused: permanent only when all of them are for good."""
    with post_office(certificates.server) as office:
        office.refuse_address = {"desk@example.org": desk, **({"lead@example.org": lead} if lead else {})}
        delivery = _send(office, certificates)

        assert (delivery.outcome, len(office.mails)) == (outcome, mails)
    assert outcome != "delivered" or "desk@example.org refused: SMTP" in delivery.answer


def test_a_wrong_password_is_temporary_and_does_not_appear_in_the_answer(certificates: Certificates) -> None:
    """535 is a matter of configuration: people mend it within the seven days."""
    with post_office(certificates.server) as office:
        delivery = _send(office, certificates, password="wrong-password")

        assert (delivery.outcome, delivery.unreachable, office.mails) == ("temporary", True, [])
    assert delivery.answer.startswith("sign-in refused: SMTP 535")
    assert "wrong-password" not in delivery.answer


def test_a_server_that_offers_no_starttls_gets_neither_password_nor_mail() -> None:
    """Somebody in between who strips STARTTLS learns nothing."""
    with post_office(None) as office:
        target = MailTarget("localhost", office.port, "w@example.org", ("d@example.org",), "starttls", "u", "p", 5)
        delivery = MailSender(target).deliver(some_message())

        assert (delivery.outcome, office.mails) == ("temporary", [])
    assert "STARTTLS" in delivery.answer


def test_a_server_with_a_certificate_of_another_authority_gets_nothing(certificates: Certificates) -> None:
    """TLS is verified."""
    with post_office(certificates.server) as office:
        delivery = _send(office, certificates, ca_file=certificates.stranger)

        assert (delivery.outcome, office.mails) == ("temporary", [])
    assert delivery.answer.startswith("certificate not trusted")


def test_a_relay_on_this_machine_may_be_used_without_tls() -> None:
    """`security = "none"` sends in clear, and then no password."""
    with post_office(None) as office:
        target = MailTarget("localhost", office.port, "w@example.org", ("d@example.org",), "none", timeout=5)
        delivery = MailSender(target).deliver(some_message())

        assert (delivery.outcome, office.encrypted) == ("delivered", [False])


def test_a_server_that_speaks_tls_from_the_first_byte_is_reached(certificates: Certificates) -> None:
    """`security = "tls"`, with the certificate verified and a password."""
    with post_office(certificates.server, implicit=True) as office:
        good = _send(office, certificates, security="tls")
        bad = _send(office, certificates, security="tls", ca_file=certificates.stranger)

        assert (good.outcome, bad.outcome, office.signed_in) == ("delivered", "temporary", [True])


def test_a_server_that_greets_with_a_refusal_is_tried_again() -> None:
    """554 instead of a greeting speaks of the session, not of the message."""
    with socket.create_server(("127.0.0.1", 0)) as server:
        thread = threading.Thread(target=_refuse_session, args=(server,), daemon=True)
        thread.start()
        target = MailTarget("127.0.0.1", server.getsockname()[1], "w@example.org", ("d@example.org",), timeout=5)
        delivery = MailSender(target).deliver(some_message())
        thread.join()

    assert (delivery.outcome, delivery.unreachable) == ("temporary", True)
    assert "554" in delivery.answer


def _refuse_session(server: socket.socket) -> None:
    connection, _ = server.accept()
    with connection:
        connection.sendall(b"554 no service today\r\n")
        connection.recv(1024)


def test_a_missing_ca_file_is_found_at_construction() -> None:
    """Not at the first breach."""
    with pytest.raises(ValueError, match="ca_file"):
        MailSender(MailTarget("h", 25, "a@b", ("c@d",), ca_file="/nowhere/ca.pem"))


def test_no_server_is_temporary() -> None:
    """A refused connection."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        target = MailTarget("127.0.0.1", free.getsockname()[1], "w@example.org", ("d@example.org",), timeout=5)
        delivery = MailSender(target).deliver(some_message())

    assert (delivery.outcome, delivery.unreachable) == ("temporary", True)


@pytest.mark.parametrize(
    "changes",
    [
        {"sender": "a@b\r\nBcc: c@d"},
        {"to": ()},
        {"to": ("a@b, c@d",)},
        {"security": "none", "password": "p"},
        {"timeout": 0},
    ],
)
def test_an_unusable_target_is_refused_at_construction(changes: dict[str, Any]) -> None:
    """Addresses are bare, at least one; no password in clear; a time-out above 0."""
    target = MailTarget("host", 587, "a@b", ("c@d",))
    with pytest.raises(ValueError, match=r"sender|to|security|timeout"):
        replace(target, **changes)
