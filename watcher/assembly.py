"""From the configuration to the parts of a look: sources opened, promises and routes as records, the ledger."""

from __future__ import annotations

from watcher.errors import SettingsError
from watcher.ledger.store import Ledger
from watcher.look import Evidence, Routing, Watched
from watcher.notices.base import RouteSpec
from watcher.notices.routes import Hidden, route_of
from watcher.settings import PromiseTable, RouteTable, Settings, SourceTable
from watcher.sources import open_source
from watcher.sources.base import Source, SourceSpec


def source_spec(settings: Settings, table: SourceTable) -> SourceSpec:
    """The place of a source with its credentials resolved. Raises SettingsError."""
    query = None
    if table.query_file is not None:
        try:
            query = (settings.folder / table.query_file).read_text(encoding="utf-8")
        except OSError as error:
            raise SettingsError(
                [f"source {table.name!r}: query_file = {table.query_file!r}: cannot be read ({error.strerror})"]
            ) from None
    return SourceSpec(
        name=table.name,
        kind=table.kind,
        path=table.path,
        url=settings.secret(table) if table.kind == "database" else table.remote,
        table=table.table,
        query=query,
        base=settings.folder,
        max_rows=table.max_rows,
        max_bytes=table.max_bytes,
        timeout=float(table.timeout),
        slice_limit=table.slice_limit,
        keep_raw=table.keep_raw,
    )


def source_of(settings: Settings, table: SourceTable) -> Source:
    """The source, ready to answer."""
    return open_source(source_spec(settings, table))


def watched(settings: Settings, source: str) -> list[Watched]:
    """The promises that rest on a source, as the configuration has them now."""
    table = settings.source_of(source)
    return [
        Watched(
            promise.terms(table),
            promise.staleness,
            promise.uncertified or promise.release_evidence is None,
            promise.retired,
            evidence_of(promise),
        )
        for promise in settings.promise
        if promise.source == source
    ]


def evidence_of(promise: PromiseTable) -> Evidence | None:
    """The release evidence as a record."""
    given = promise.release_evidence
    return None if given is None else Evidence(given.labels, given.errors, given.models)


def routings(settings: Settings) -> list[Routing]:
    """What a look must know of the routes."""
    return [
        Routing(route.name, frozenset(route.events), route.retrain, frozenset(route.promises))
        for route in settings.route
    ]


def open_ledger(settings: Settings, *, write: bool) -> Ledger:
    """The ledger that the configuration names; only writers create it."""
    return Ledger.open(settings.ledger_url(), write=write, create=write)


def units(settings: Settings) -> dict[tuple[str, str], str]:
    """The noun of sentences by promise and version."""
    return {(promise.name, promise.version): promise.unit for promise in settings.promise}


def route_specs(settings: Settings) -> list[RouteSpec]:
    """The routes with their secrets resolved. Raises SettingsError naming the route and the key."""
    found = []
    for table in settings.route:
        try:
            found.append(route_of(table, _hidden(settings, table), settings.folder))
        except ValueError as error:
            raise SettingsError([str(error)]) from None
    return found


def _hidden(settings: Settings, table: RouteTable) -> Hidden:
    names = (table.secret_env,) if isinstance(table.secret_env, str) else table.secret_env or ()
    secrets = [settings.hidden(name, None, "secret") for name in names]
    if table.secret_file is not None:
        secrets += settings.hidden(None, table.secret_file, "secret").split()
    with_password = table.password_env is not None or table.password_file is not None
    return Hidden(
        url=settings.secret(table) if table.kind == "webhook" else None,
        secrets=tuple(secrets),
        password=settings.hidden(table.password_env, table.password_file, "password") if with_password else None,
        environment=settings.environment,
    )
