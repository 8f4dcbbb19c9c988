"""Real peers for tests that need one; never silently left out where it matters."""

from __future__ import annotations

import os
import shutil
from collections.abc import Callable

import pytest
from peers import postgresql as _postgresql
from peers.postgresql import postgresql, postgresql_server

__all__ = ["postgresql", "postgresql_server"]


def _program(name: str, package: str) -> Callable[[], str | None]:
    def missing() -> str | None:
        return None if shutil.which(name) else f"{name} is not there (Debian's package {package})"

    return missing


MISSING: dict[str, Callable[[], str | None]] = {
    "postgresql": _postgresql.missing,
    "prometheus": _program("prometheus", "prometheus"),
    "alertmanager": _program("prometheus-alertmanager", "prometheus-alertmanager"),
    "chromium": _program("chromium", "chromium"),
    "poppler": _program("pdftoppm", "poppler-utils"),
    "systemd": _program("systemd-analyze", "systemd"),
    "buildah": _program("buildah", "buildah"),
}
"""Name of a peer -> what is missing to start it, or None."""

_left_out: dict[str, list[str]] = {}


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Leave out tests whose peer is missing and name them at the end; with CI=true a missing peer is a failure."""
    kept, dropped = [], []
    for item in items:
        wanted = {mark.args[0] for mark in item.iter_markers("peer")}
        lacking = {
            name: reason for name in sorted(wanted) if name in MISSING and (reason := MISSING[name]()) is not None
        }
        if lacking and os.environ.get("CI") != "true":
            dropped.append(item)
            for reason in lacking.values():
                _left_out.setdefault(reason, []).append(item.nodeid)
        else:
            kept.append(item)
    if dropped:
        config.hook.pytest_deselected(items=dropped)
        items[:] = kept


@pytest.fixture(autouse=True)
def _peers_are_there(request: pytest.FixtureRequest) -> None:
    for mark in request.node.iter_markers("peer"):
        reason = MISSING.get(mark.args[0], lambda: None)()
        if reason is not None:
            pytest.fail(f"peer {mark.args[0]} is missing: {reason}")


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    """Name every test that was left out for want of its peer."""
    for reason, tests in _left_out.items():
        terminalreporter.section(f"left out: {reason}")
        for test in tests:
            terminalreporter.write_line(test)
