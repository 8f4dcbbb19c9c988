"""The daemon: builds the parts, schedules looks and notices, serves page and metrics, handles signals.

With the commands it is the only reader of the wall clock.
"""

from __future__ import annotations

from watcher.daemon.service import Hooks, Service

__all__ = ["Hooks", "Service"]
