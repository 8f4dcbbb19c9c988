"""The commands: parse, call, print, exit code. No arithmetic, no SQL."""

from watcher.cli.main import main

__all__ = ["main"]
