"""The webhook sender against a real HTTP receiver; signatures verified by the package `standardwebhooks`."""

from __future__ import annotations

import json
import socket
import threading
import time
from datetime import UTC, datetime
from typing import Any

import pytest
from notices.conftest import Certificates
from notices.memory import some_message
from peers.http_receiver import Receiver, Reply, receiver
from standardwebhooks import Webhook, WebhookVerificationError

from watcher.notices.base import Delivery, WebhookTarget
from watcher.notices.webhook import WebhookSender

# Section 9_formats of the check values; the second one is made up here.
OLD = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"
NEW = "whsec_Y2hhbmdlIHRoaXMgdGV4dCB0byBhbm90aGVyIG9uZQ=="


def _now() -> datetime:
    return datetime.now(UTC)


def _deliver(url: str, **options: Any) -> Delivery:
    return WebhookSender(WebhookTarget(url, **options), _now).deliver(some_message())


def _answering(reply: Reply) -> Delivery:
    with receiver() as peer:
        peer.answer = lambda _: reply
        return _deliver(peer.url)


@pytest.mark.parametrize("secret", [OLD, NEW])
def test_the_receiver_verifies_the_signature_with_either_secret_during_a_rotation(secret: str) -> None:
    """What arrives is verified by an independent package, bytes and time stamp included."""
    with receiver() as peer:
        delivery = _deliver(peer.url, secrets=(NEW, OLD))
        (got,) = peer.received
    taken = Webhook(secret).verify(got.body, dict(got.headers))

    assert (delivery.outcome, taken["id"]) == ("delivered", got.headers["webhook-id"])
    assert got.headers["content-type"].startswith("application/cloudevents+json")


def test_a_body_that_was_changed_on_the_way_does_not_verify() -> None:
    """The signature covers the body."""
    with receiver() as peer:
        _deliver(peer.url, secrets=(OLD,))
        (got,) = peer.received

    with pytest.raises(WebhookVerificationError):
        Webhook(OLD).verify(got.body.replace(b"broke", b"holds"), dict(got.headers))


def test_a_receiver_with_a_certificate_of_a_trusted_authority_is_reached(certificates: Certificates) -> None:
    """TLS is verified against `ca_file`."""
    with receiver(certificates.server) as peer:
        delivery = _deliver(peer.url, ca_file=certificates.trusted)

        assert (delivery.outcome, len(peer.received)) == ("delivered", 1)


@pytest.mark.parametrize("authority", ["stranger", None])
def test_a_receiver_with_a_certificate_of_another_authority_gets_nothing(
    certificates: Certificates, authority: str | None
) -> None:
    """Neither another authority nor the machine's own ones vouch for it: temporary, and no byte of the message left."""
    with receiver(certificates.server) as peer:
        delivery = _deliver(peer.url, ca_file=authority and certificates.stranger)

        assert (delivery.outcome, delivery.unreachable, peer.received) == ("temporary", True, [])
    assert delivery.answer.startswith("certificate not trusted")


def test_a_certificate_for_another_host_is_refused(certificates: Certificates) -> None:
    """The name in the certificate must be that of the url."""
    with receiver(certificates.server) as peer:
        delivery = _deliver(peer.url.replace("localhost", "127.0.0.1"), ca_file=certificates.trusted)

        assert (delivery.outcome, peer.received) == ("temporary", [])


def test_redirects_are_not_followed() -> None:
    """A 307 to another receiver delivers nothing there and is tried again."""
    with receiver() as elsewhere, receiver() as peer:
        peer.answer = lambda _: Reply(307, headers={"location": elsewhere.url})
        delivery = _deliver(peer.url)

        assert (delivery.outcome, len(peer.received), elsewhere.received) == ("temporary", 1, [])
    assert "redirects are not followed" in delivery.answer


@pytest.mark.parametrize(
    ("status", "outcome", "unreachable"),
    [
        (200, "delivered", False),
        (202, "delivered", False),
        (204, "delivered", False),
        (410, "gone", False),
        (400, "temporary", False),
        (401, "temporary", False),
        (404, "temporary", False),
        (429, "temporary", True),
        (500, "temporary", True),
        (503, "temporary", True),
    ],
)
def test_the_status_decides(status: int, outcome: str, unreachable: bool) -> None:
    """2xx delivered, 410 ends the route, everything else is tried again; 429 and 5xx spare the rest of the route."""
    delivery = _answering(Reply(status))

    assert (delivery.outcome, delivery.unreachable) == (outcome, unreachable)


@pytest.mark.parametrize(
    ("status", "body", "expected"),
    [
        (200, b'{"status": "accepted", "reference": "run-17"}', ("delivered", "accepted", "run-17")),
        (200, b'{"status": "refused", "reference": 9}', ("delivered", "refused", "9")),
        (409, b'{"status": "refused"}', ("permanent", "refused", None)),
        (500, b'{"status": "refused"}', ("temporary", None, None)),
        (200, b'{"status": "maybe", "reference": ["x"]}', ("delivered", None, None)),
        (200, b"[" * 100_000, ("delivered", None, None)),
        (200, b"ok", ("delivered", None, None)),
        (200, b"", ("delivered", None, None)),
    ],
)
def test_the_answer_of_a_retraining_receiver_is_read_from_the_body(
    status: int, body: bytes, expected: tuple[str, str | None, str | None]
) -> None:
    """Only the documented JSON is an answer; anything else is no answer and no error."""
    delivery = _answering(Reply(status, body))

    assert (delivery.outcome, delivery.status, delivery.reference) == expected


def test_what_a_receiver_writes_is_recorded_on_one_safe_line() -> None:
    """Control characters of the answer do not reach logs, pages or the ledger."""
    delivery = _answering(Reply(400, b"bad\r\nSubject: x\x1b[31m" + b"y" * 1000))

    assert delivery.answer.isprintable()
    assert len(delivery.answer) < 300


def test_nobody_listens_is_temporary_and_says_nothing_of_the_path() -> None:
    """A refused connection; the path may hold a receiver's secret and stays out of the answer."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        url = f"http://127.0.0.1:{free.getsockname()[1]}/secret-path"
        delivery = _deliver(url)

    assert (delivery.outcome, delivery.unreachable) == ("temporary", True)
    assert "secret-path" not in delivery.answer


def test_one_deadline_covers_a_receiver_that_drips_its_answer() -> None:
    """A header byte every 50 ms never trips a time-out for single reads, the deadline of the whole exchange does."""
    with socket.create_server(("127.0.0.1", 0)) as server:
        stop = threading.Event()
        thread = threading.Thread(target=_drip, args=(server, stop), daemon=True)
        thread.start()
        began = time.monotonic()
        delivery = _deliver(f"http://127.0.0.1:{server.getsockname()[1]}/", timeout=0.5)
        took = time.monotonic() - began
        stop.set()
        thread.join()

    assert (delivery.outcome, delivery.unreachable, took < 5) == ("temporary", True, True)
    assert delivery.answer == "no answer within 0.5 s"


def _drip(server: socket.socket, stop: threading.Event) -> None:
    connection, _ = server.accept()
    with connection:
        try:
            while not stop.wait(0.05):
                connection.sendall(b"H")
        except OSError:
            return


def test_an_endless_answer_is_read_only_to_its_beginning() -> None:
    """A success whose body never ends is a success."""
    with receiver() as peer:
        peer.answer = lambda _: Reply(200, b"x" * 5_000_000)
        delivery = _deliver(peer.url)

    assert delivery.outcome == "delivered"


@pytest.mark.parametrize("url", ["ftp://host/x", "https://", "host/x", "https://u:p@host/x", "https://u@host/x"])
def test_an_unusable_url_is_refused_at_construction_without_being_repeated(url: str) -> None:
    """Scheme, host and user info are checked; the url itself may hold a secret."""
    with pytest.raises(ValueError, match="url") as caught:
        WebhookTarget(url)

    assert url not in str(caught.value)


def test_a_target_hides_url_and_secrets_when_it_is_printed() -> None:
    """repr shows neither."""
    shown = repr(WebhookTarget("https://host/hooks/T0/B1/token", (OLD,)))

    assert "token" not in shown
    assert OLD not in shown


def test_a_missing_ca_file_and_a_bad_secret_are_found_at_construction() -> None:
    """Not at the first breach."""
    with pytest.raises(ValueError, match="ca_file"):
        WebhookSender(WebhookTarget("https://host/", ca_file="/nowhere/ca.pem"), _now)
    with pytest.raises(ValueError, match="secret"):
        WebhookSender(WebhookTarget("https://host/", ("whsec_x",)), _now)


def test_the_receivers_body_is_the_envelope() -> None:
    """Sentence, keys and head are in the data."""
    with receiver() as peer:
        _deliver(peer.url)
        told = json.loads(_only(peer))["data"]

    assert (told["keys"], told["look"], told["notices"][0]["sentence"]) == (["k1"], 7, "It broke.")


def _only(peer: Receiver) -> bytes:
    (got,) = peer.received
    return got.body
