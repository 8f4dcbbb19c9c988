"""docs/notices.md says what the code does."""

from __future__ import annotations

import json
import re
import time
from pathlib import Path
from typing import Any

from notices.memory import T0, Memory, breach_event, some_message, some_standing

from watcher.notices.base import LogTarget, RouteSpec
from watcher.notices.envelope import body, envelope, signature
from watcher.notices.message import Writer

TEXT = (Path(__file__).parents[2] / "docs" / "notices.md").read_text(encoding="utf-8")
SECRET = "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"  # the published vector, section 9_formats of the check values


def _blocks(language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", TEXT, re.DOTALL)


def test_the_example_is_what_such_a_breach_is_sent_as() -> None:
    """Every field of the example is there with that value; only the two sentences that were shortened differ in length."""
    memory = Memory()
    memory.happen(breach_event(column="depot", value="Birch"), 312, 0, T0, "desk")
    memory.known_standings["damage-photos", "1"] = [some_standing(), some_standing(column="depot", value="Birch")]
    writer = Writer(memory, lambda *_: "http://127.0.0.1:8750/")
    waiting = list(memory.waiting("desk"))
    sent: Any = envelope(writer(RouteSpec("desk", LogTarget()), memory.message_id("desk", 312), waiting))
    told = json.loads(_blocks("json")[0])
    told["data"]["standings"] = sent["data"]["standings"]
    for field in ("now", "advice"):
        shortened = told["data"]["notices"][0].pop(field).removesuffix(" ...")
        full = sent["data"]["notices"][0].pop(field)
        assert full[:20] == shortened[:20]

    assert told == sent


def test_the_recipe_for_receivers_verifies_a_real_message_and_refuses_a_forged_or_an_old_one() -> None:
    """The code of the page, run."""
    names: dict[str, Any] = {}
    exec(_blocks("python")[0], names)
    payload, now = body(some_message()), int(time.time())

    def verified(stamp: int, sent: bytes, secret: str = SECRET) -> bool:
        made = signature([SECRET], "m", stamp, payload)
        headers = {"webhook-id": "m", "webhook-timestamp": str(stamp), "webhook-signature": made}
        return bool(names["verified"](secret, headers, sent))

    assert verified(now, payload)
    assert not verified(now, payload + b" ")
    assert not verified(now, payload, "whsec_" + "QUFB" * 10)
    assert not verified(now - 400, payload)
