"""Structured logs: readable on a terminal, one JSON object a line otherwise."""

from __future__ import annotations

import logging
import sys
from typing import TextIO

import structlog


def configure(stream: TextIO = sys.stderr) -> structlog.stdlib.BoundLogger:
    """Send this program's lines, and those of the libraries it uses, to a stream in one form."""
    shared: list[structlog.typing.Processor] = [
        structlog.contextvars.merge_contextvars,
        structlog.stdlib.add_log_level,
        structlog.processors.TimeStamper(fmt="iso", utc=True),
        structlog.processors.StackInfoRenderer(),
    ]
    terminal = stream.isatty()
    last: structlog.typing.Processor = (
        structlog.dev.ConsoleRenderer() if terminal else structlog.processors.JSONRenderer(sort_keys=True)
    )
    finish = [structlog.stdlib.ProcessorFormatter.remove_processors_meta]
    if not terminal:
        finish.append(structlog.processors.format_exc_info)  # type: ignore[arg-type]
    structlog.configure(
        processors=[*shared, structlog.stdlib.ProcessorFormatter.wrap_for_formatter],
        logger_factory=structlog.stdlib.LoggerFactory(),
        wrapper_class=structlog.stdlib.BoundLogger,
        cache_logger_on_first_use=True,
    )
    handler = logging.StreamHandler(stream)
    handler.setFormatter(structlog.stdlib.ProcessorFormatter(foreign_pre_chain=shared, processors=[*finish, last]))
    root = logging.getLogger()
    root.handlers = [handler]
    root.setLevel(logging.INFO)
    for quiet in ("httpx", "httpcore", "uvicorn.access", "uvicorn.error"):
        logging.getLogger(quiet).setLevel(logging.WARNING)
    # A tick that finds the look before it still under way is left out: that is what max_instances is for.
    logging.getLogger("apscheduler").setLevel(logging.ERROR)
    logger: structlog.stdlib.BoundLogger = structlog.get_logger("watcher")
    return logger
