"""`watcher run`: the daemon."""

from __future__ import annotations

import asyncio
from pathlib import Path

import click

from watcher.cli.common import CONFIG


@click.command()
@CONFIG
def run(config: Path) -> None:
    """Look on schedule, serve page and metrics, send notices, until SIGTERM or Ctrl-C; SIGHUP reads CONFIG again.

    Logs go to standard error: readable on a terminal, one JSON object a line otherwise. Exits 0 when it is told to stop; a
    source or ledger that cannot be reached is tried again and ends nothing.
    """
    from watcher.daemon import logs

    logs.configure()
    asyncio.run(serve(config))


async def serve(config: Path) -> None:
    """One daemon inside the running event loop."""
    from watcher.daemon.service import Service

    await Service(config).run()
