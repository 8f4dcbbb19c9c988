"""`watcher run`: the daemon."""

from __future__ import annotations

import asyncio
from pathlib import Path

import click

from watcher.cli.common import CONFIG
from watcher.daemon import logs
from watcher.daemon.service import Service


@click.command()
@CONFIG
def run(config: Path) -> None:
    """Look on schedule, serve page and metrics, send notices, until SIGTERM or Ctrl-C; SIGHUP reads CONFIG again."""
    logs.configure()
    asyncio.run(serve(config))


async def serve(config: Path) -> None:
    """One daemon inside the running event loop."""
    await Service(config).run()
