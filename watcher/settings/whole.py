"""The whole file, and the secrets that it names."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from pydantic import Field

from watcher.errors import SettingsError
from watcher.settings.promises import PromiseTable
from watcher.settings.routes import RouteTable
from watcher.settings.tables import LedgerTable, MetricsTable, ReportTable, SourceTable, Table, WebTable


class Settings(Table):
    """The whole file."""

    ledger: LedgerTable = LedgerTable(url="sqlite:///watcher.db")
    web: WebTable = WebTable()
    metrics: MetricsTable = MetricsTable()
    report: ReportTable = ReportTable()
    source: tuple[SourceTable, ...] = Field(min_length=1)
    promise: tuple[PromiseTable, ...] = Field(min_length=1)
    route: tuple[RouteTable, ...] = ()
    folder: Path = Field(default=Path(), exclude=True)
    environment: Mapping[str, str] = Field(default_factory=dict, exclude=True, repr=False)

    def source_of(self, name: str) -> SourceTable:
        """The source of that name."""
        return next(source for source in self.source if source.name == name)

    def secret(self, table: LedgerTable | SourceTable | RouteTable) -> str:
        """The url of a table, from itself, its variable or its file; SettingsError where that is missing."""
        if table.url is not None:
            return table.url
        return self.hidden(table.url_env, table.url_file, "url")

    def hidden(self, variable: str | None, file: str | None, key: str) -> str:
        """A secret from an environment variable or a file."""
        if variable is not None:
            value = self.environment.get(variable)
            if not value:
                raise SettingsError(
                    [f"{key}_env = {variable!r}: the environment variable is not set; set it and start again"]
                )
            return value.strip()
        path = self.folder / str(file)
        try:
            return path.read_text(encoding="utf-8").strip()
        except OSError as error:
            raise SettingsError(
                [f"{key}_file = {file!r}: cannot be read ({error.strerror}); create it with mode 600"]
            ) from None

    def ledger_url(self) -> str:
        """The ledger's url; a relative SQLite path is taken from the folder of the configuration."""
        url = self.secret(self.ledger)
        prefix = "sqlite:///"
        if url.startswith(prefix) and not url.startswith("sqlite:////") and url != prefix + ":memory:":
            return prefix + str((self.folder / url[len(prefix) :]).resolve())
        return url
