"""Envelope and signature, against the packages `cloudevents` and `standardwebhooks` and a published vector."""

import json
from datetime import UTC, datetime
from typing import Any

import pytest
from cloudevents.core.bindings.http import HTTPMessage, from_http_event
from notices.memory import LEDGER, T0, some_message
from standardwebhooks import Webhook

from watcher.notices.base import Attachment
from watcher.notices.envelope import CONTENT_TYPE, body, envelope, secret_bytes, signature

# Section 9_formats of the check values: the test vector of the Standard Webhooks reference libraries.
SECRET = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"
OTHER = "whsec_" + "Y2hhbmdlIHRoaXMgdGV4dCB0byBhbm90aGVyIG9uZQ=="


def test_the_signature_is_that_of_the_published_vector() -> None:
    """One secret, one `v1` signature over id, timestamp and body."""
    made = signature([SECRET], "msg_p5jXN8AQM9LWM0D4loKWxJek", 1614265330, b'{"test": 2432232314}')

    assert made == "v1,g0hM9SsE+OTPJTGt/tmIKtSyZlE3uFJELVlNIOLJ1OE="


@pytest.mark.parametrize("secret", [SECRET, OTHER])
def test_during_a_rotation_either_secret_verifies_with_the_independent_package(secret: str) -> None:
    """Two secrets give two signatures separated by a space; the package takes the message with either."""
    payload, stamp = body(some_message("m1")), int(datetime.now(UTC).timestamp())
    headers = {
        "webhook-id": "m1",
        "webhook-timestamp": str(stamp),
        "webhook-signature": signature([SECRET, OTHER], "m1", stamp, payload),
    }
    taken = Webhook(secret).verify(payload, headers)

    assert taken["id"] == "m1"


@pytest.mark.parametrize(
    ("secret", "why"),
    [("whsec_???", "base64"), ("whsec_c2hvcnQ=", "5 bytes"), ("whsec_" + "QUFB" * 30, "90 bytes"), ("", "0 bytes")],
)
def test_an_unusable_secret_is_refused_without_being_repeated(secret: str, why: str) -> None:
    """The message names the length or the form, never the secret."""
    with pytest.raises(ValueError, match=why) as caught:
        secret_bytes(secret)
    assert not secret or secret not in str(caught.value)


def test_the_envelope_is_a_cloud_event_for_the_independent_package() -> None:
    """The package reads every attribute back from the structured form and validates it."""
    message = some_message()
    read: Any = from_http_event(HTTPMessage({"content-type": CONTENT_TYPE}, body(message)))

    assert (read.get_id(), read.get_source(), read.get_type()) == (
        message.id,
        f"urn:watcher:{LEDGER}",
        "watcher.notices",
    )
    assert (read.get_specversion(), read.get_subject(), read.get_time()) == ("1.0", "damage-photos/1", T0)
    assert read.get_data()["notices"][0]["slice"] == {"column": "depot", "value": "Birch"}


def test_the_envelope_has_exactly_its_eight_keys_none_of_them_empty() -> None:
    """CloudEvents 1.0 forbids empty attributes; nothing of ours stands beside them."""
    made = envelope(some_message())

    assert sorted(made) == ["data", "datacontenttype", "id", "source", "specversion", "subject", "time", "type"]
    assert all(made.values())


def test_the_evidence_travels_inside_the_data() -> None:
    """CSV as text, JSON as JSON."""
    files = (Attachment("counts.csv", "text/csv", "a,b\n1,2\n"), Attachment("v.json", "application/json", '{"x": [1]}'))
    told = json.loads(body(some_message(attachments=files)))["data"]["evidence"]

    assert told == {"counts.csv": "a,b\n1,2\n", "v.json": {"x": [1]}}
