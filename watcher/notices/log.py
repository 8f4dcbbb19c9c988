"""Notices into the daemon's own structured log."""

from __future__ import annotations

from typing import Any, Protocol

import structlog

from watcher.notices.base import Delivery, Message


class Logger(Protocol):
    """The one call that is used of a structured logger."""

    def info(self, event: str, /, **facts: Any) -> Any:
        """Write one line."""
        ...


class LogSender:
    """Writes one line for each notice; it is delivered when the line was written."""

    def __init__(self, logger: Logger | None = None) -> None:
        self._logger: Logger = logger or structlog.get_logger("watcher.notices")

    def deliver(self, message: Message) -> Delivery:
        """Write the lines; a log that cannot be written (a closed pipe, a full disk) is tried again."""
        try:
            for item in message.items:
                self._logger.info(
                    item.sentence,
                    notice=item.kind,
                    promise=item.promise,
                    version=item.version,
                    slice=f"{item.column}={item.value}" if item.column else "",
                    key=item.key,
                    message=message.id,
                    look=message.look,
                    head=str(message.head),
                )
        except (OSError, ValueError) as error:
            return Delivery("temporary", f"log cannot be written: {type(error).__name__}", unreachable=True)
        return Delivery("delivered", "written")
