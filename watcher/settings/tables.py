"""The small tables of the file: ledger, web, metrics, report, sources."""

from __future__ import annotations

import re
from typing import Annotated, Final, Literal
from urllib.parse import urlsplit

from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

from watcher.records import Columns
from watcher.settings.values import Duration, Name, Zone

RAW: Final = ConfigDict(extra="forbid", frozen=True, strict=False, populate_by_name=True, arbitrary_types_allowed=True)


class Table(BaseModel):
    """A table of the file: frozen, unknown keys refused."""

    model_config = RAW


def no_password(url: str | None) -> str | None:
    """Refuse a url that holds a password."""
    if url is not None:
        try:
            password = urlsplit(url).password
        except ValueError as error:
            raise ValueError(f"is not a url: {error}") from None
        if password:
            raise ValueError(
                "holds a password; keep the whole url in an environment variable (url_env) or a file (url_file)"
            )
    return url


class LedgerTable(Table):
    """Where the evidence is kept."""

    url: str | None = None
    url_env: str | None = None
    url_file: str | None = None

    _check = field_validator("url")(no_password)


class WebTable(Table):
    """Where page, API and metrics are served."""

    listen: str = "127.0.0.1:8750"
    hosts: tuple[str, ...] = ()
    """Further Host headers to answer to."""
    behind_proxy: bool = False
    public_url: str | None = None
    """Where people reach the page, for the links in notices; default: http:// and `listen`."""
    tls_certificate: str | None = None
    tls_key: str | None = None

    @field_validator("listen")
    @classmethod
    def _address(cls, value: str) -> str:
        host, _, port = value.rpartition(":")
        if not host or not port.isdigit() or int(port) > 65535:
            raise ValueError(f'{value!r} is not an address; write host:port, for instance "127.0.0.1:8750"')
        return value

    @property
    def host(self) -> str:
        """The address to bind to."""
        return self.listen.rpartition(":")[0].strip("[]")

    @property
    def port(self) -> int:
        """The port; 0: any free one."""
        return int(self.listen.rpartition(":")[2])


class MetricsTable(Table):
    """What /metrics shows."""

    slices: bool = True


class ReportTable(Table):
    """When the weekly report is made."""

    at: str = "mon 06:00"
    fdr: Annotated[float, Field(gt=0, lt=1)] = 0.05

    @field_validator("at")
    @classmethod
    def _when(cls, value: str) -> str:
        if not re.fullmatch(r"(mon|tue|wed|thu|fri|sat|sun) ([01]\d|2[0-3]):[0-5]\d", value):
            raise ValueError(f'{value!r} is not a time of the week; write for instance "mon 06:00"')
        return value


class ColumnsTable(Table):
    """Which column of the source plays which part."""

    id: str | None = None
    revision: str | None = None
    time: str
    labelled_at: str | None = None
    prediction: str | None = None
    label: str | None = None
    error: str | None = None
    loss: str | None = None
    weight: str | None = None
    cluster: str | None = None
    labelling_probability: str | None = None
    selected: str | None = None

    @model_validator(mode="after")
    def _outcome(self) -> ColumnsTable:
        outcomes = [name for name in ("label", "error", "loss") if getattr(self, name) is not None]
        if len(outcomes) != 1:
            raise ValueError(f"exactly one of label, error, loss must be mapped; found {', '.join(outcomes) or 'none'}")
        if self.label is not None and self.prediction is None:
            raise ValueError("prediction must be mapped beside label")
        if (self.labelling_probability is None) != (self.selected is None):
            raise ValueError("labelling_probability and selected belong together: map both or none")
        return self

    def record(self) -> Columns:
        """The frozen record of the same content."""
        return Columns(**self.model_dump())


class SourceTable(Table):
    """One place that labelled samples are pulled from."""

    name: Name
    kind: Literal["csv", "parquet", "database", "spark"]
    path: str | None = None
    url: str | None = None
    url_env: str | None = None
    url_file: str | None = None
    remote: str | None = None
    table: str | None = None
    query_file: str | None = None
    every: Duration = 600
    time_format: Literal["rfc3339", "epoch-seconds", "epoch-milliseconds"] = "rfc3339"
    time_zone: Zone | None = None
    columns: ColumnsTable
    max_rows: Annotated[int, Field(gt=0)] = 1_000_000_000
    max_bytes: Annotated[int, Field(gt=0)] = 1_000_000_000_000
    timeout: Duration = 600
    slice_limit: Annotated[int, Field(gt=0, le=10_000)] = 200
    keep_raw: bool = True

    _check = field_validator("url")(no_password)

    @model_validator(mode="after")
    def _place(self) -> SourceTable:
        if self.kind in ("csv", "parquet") and not self.path:
            raise ValueError(f'kind = "{self.kind}" needs path, for instance "labels/*.{self.kind}"')
        if self.kind == "database":
            if sum(x is not None for x in (self.url, self.url_env, self.url_file)) != 1:
                raise ValueError('kind = "database" needs exactly one of url, url_env, url_file')
            if (self.table is None) == (self.query_file is None):
                raise ValueError('kind = "database" needs exactly one of table, query_file')
        if self.kind == "spark" and (self.remote is None or (self.table is None) == (self.path is None)):
            raise ValueError('kind = "spark" needs remote and one of table, path')
        return self
