"""The log route."""

from dataclasses import replace
from typing import Any

import structlog
from notices.memory import DIGEST, some_message

from watcher.notices.log import LogSender


def test_each_notice_is_one_line_with_key_look_and_head() -> None:
    """Two notices of one message are two lines."""
    message = some_message()
    message = replace(message, items=(message.items[0], replace(message.items[0], key="k2", column="", value="")))
    with structlog.testing.capture_logs() as lines:
        delivery = LogSender().deliver(message)

    assert delivery.outcome == "delivered"
    assert [(line["key"], line["slice"], line["look"]) for line in lines] == [("k1", "depot=Birch", 7), ("k2", "", 7)]
    assert {(line["event"], line["head"]) for line in lines} == {("It broke.", f"7:{DIGEST}")}


def test_a_log_that_cannot_be_written_is_tried_again() -> None:
    """A full disk or a closed pipe."""

    class Broken:
        def info(self, event: str, /, **facts: Any) -> None:
            raise BrokenPipeError

    delivery = LogSender(Broken()).deliver(some_message())

    assert (delivery.outcome, delivery.answer) == ("temporary", "log cannot be written: BrokenPipeError")
