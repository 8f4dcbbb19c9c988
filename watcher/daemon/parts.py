"""The parts of the daemon that follow from the configuration, built together so that a reload swaps them together."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime

from watcher import assembly
from watcher.daemon.children import Children
from watcher.daemon.pulls import ChildSource, Point
from watcher.errors import SettingsError
from watcher.look import Routing, Watched, refuse_weak_evidence
from watcher.notices.base import RouteSpec, Sender
from watcher.notices.routes import senders
from watcher.settings import Settings, SourceTable
from watcher.sources.base import Source


@dataclass(frozen=True, slots=True)
class Watch:
    """One source, the promises that rest on it, and how often it is looked at."""

    table: SourceTable
    source: Source
    promises: tuple[Watched, ...]


@dataclass(frozen=True, slots=True)
class Parts:
    """Everything that a configuration gives."""

    settings: Settings
    watches: Mapping[str, Watch]
    routings: tuple[Routing, ...]
    routes: tuple[RouteSpec, ...]
    senders: Mapping[str, Sender]


def build(settings: Settings, children: Children, at_point: Point, clock: Callable[[], datetime]) -> Parts:
    """Build the parts. Raises SettingsError for a secret that is missing, WeakEvidence for a promise it does not bear out."""
    watches = {
        table.name: Watch(
            table,
            ChildSource(assembly.source_spec(settings, table), children, at_point),
            tuple(assembly.watched(settings, table.name)),
        )
        for table in settings.source
    }
    for watch in watches.values():
        refuse_weak_evidence(watch.promises)
    routes = tuple(assembly.route_specs(settings))
    return Parts(
        settings=settings,
        watches=watches,
        routings=tuple(assembly.routings(settings)),
        routes=routes,
        senders=_senders(routes, clock),
    )


def _senders(routes: Sequence[RouteSpec], clock: Callable[[], datetime]) -> Mapping[str, Sender]:
    try:
        return senders(routes, clock)
    except ValueError as error:
        raise SettingsError([str(error)]) from None
