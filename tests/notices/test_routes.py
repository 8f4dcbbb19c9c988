"""Routes from real settings."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import pytest

from watcher.notices.base import CommandTarget, LogTarget, MailTarget, RouteSpec, WebhookTarget
from watcher.notices.command import CommandSender
from watcher.notices.email import MailSender
from watcher.notices.log import LogSender
from watcher.notices.routes import Hidden, route_of, senders
from watcher.notices.webhook import WebhookSender
from watcher.records import EVENTS
from watcher.settings import RouteTable

SECRET = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"
FOLDER = Path("/etc/watcher")


def test_a_webhook_table_becomes_a_webhook_route() -> None:
    """Url and secrets come from what the settings read, ca_file from the folder of the configuration."""
    table = RouteTable(name="retraining", kind="webhook", url_env="U", secret_env="S", retrain=True, ca_file="ca.pem")
    route = route_of(table, Hidden(url="https://host/x", secrets=(SECRET,)), FOLDER)

    assert route.target == WebhookTarget("https://host/x", (SECRET,), 10, "/etc/watcher/ca.pem")
    assert (route.name, route.retrain) == ("retraining", True)


@pytest.mark.parametrize(("security", "port"), [("starttls", 587), ("tls", 465), ("none", 25)])
def test_a_mail_table_gets_the_usual_port_of_its_security(security: str, port: int) -> None:
    """Submission, implicit TLS, relay (RFC 6409, RFC 8314, RFC 5321; from memory)."""
    table = RouteTable(name="m", kind="email", host="h", sender="a@b", to=("c@d",), security=security)
    target = route_of(table, Hidden(), FOLDER).target

    assert isinstance(target, MailTarget)
    assert target.port == port


def test_a_command_gets_only_the_variables_that_its_table_lists() -> None:
    """A listed variable that is not set is left out."""
    table = RouteTable(name="c", kind="command", command=("/bin/true",), environment=("TEAM", "UNSET"), timeout="30s")
    route = route_of(table, Hidden(environment={"TEAM": "blue", "SECRET": "hush"}), FOLDER)

    assert route.target == CommandTarget(("/bin/true",), (("TEAM", "blue"),), 30)


def test_an_unusable_table_names_its_route() -> None:
    """The route and the key."""
    table = RouteTable(name="m", kind="email", host="h", sender="not an address", to=("c@d",))
    with pytest.raises(ValueError, match="route 'm': sender"):
        route_of(table, Hidden(), FOLDER)


def test_every_kind_of_target_has_its_sender() -> None:
    """And a bad secret names its route."""
    targets = {
        "log": LogTarget(),
        "webhook": WebhookTarget("https://host/"),
        "email": MailTarget("h", 25, "a@b", ("c@d",)),
        "command": CommandTarget(("/bin/true",)),
    }
    made = senders([RouteSpec(name, target) for name, target in targets.items()], lambda: datetime.now(UTC))

    assert {name: type(sender) for name, sender in made.items()} == {
        "log": LogSender,
        "webhook": WebhookSender,
        "email": MailSender,
        "command": CommandSender,
    }
    with pytest.raises(ValueError, match="route 'w': secret"):
        senders([RouteSpec("w", WebhookTarget("https://host/", ("x",)))], lambda: datetime.now(UTC))


def test_what_a_route_carries() -> None:
    """By default all but two kinds; a list carries just that; a retraining route breaches only; of its promises only."""
    plain, listed = RouteSpec("a", LogTarget()), RouteSpec("b", LogTarget(), events=("warning", "labels-resumed"))
    retrain, few = RouteSpec("c", LogTarget(), retrain=True), RouteSpec("d", LogTarget(), promises=("p",))

    assert {kind for kind in EVENTS if not plain.carries(kind)} == {"labels-resumed", "source-restored"}
    assert {kind for kind in EVENTS if listed.carries(kind)} == {"warning", "labels-resumed"}
    assert {kind for kind in EVENTS if retrain.carries(kind)} == {"breach"}
    assert (few.carries("breach", "p"), few.carries("breach", "q"), few.carries("source-failed")) == (True, False, True)
    assert not plain.carries("heartbeat")
    assert RouteSpec("e", LogTarget(), heartbeat=60).carries("heartbeat")


def test_a_heartbeat_of_no_length_is_refused() -> None:
    """With the form that is wanted."""
    with pytest.raises(ValueError, match="heartbeat = 0"):
        RouteSpec("a", LogTarget(), heartbeat=0)
