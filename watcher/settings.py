"""The configuration: a TOML file, read into frozen models, every problem named at once.

The only reader of the environment: secrets and urls come from variables or files that the TOML names.
docs/configuration.md documents every key; a test holds it against these models.
"""

from __future__ import annotations

import difflib
import os
import re
import tomllib
import zoneinfo
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from decimal import Decimal, InvalidOperation
from pathlib import Path
from typing import Annotated, Any, Final, Literal
from urllib.parse import urlsplit

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError, field_validator, model_validator

from watcher.errors import SettingsError
from watcher.records import EVENTS, Columns, Counting, Measure, Slice, Terms

_UNITS: Final = {"s": 1, "m": 60, "h": 3600, "d": 86400, "w": 604800}
BUCKETS: Final = ("1h", "2h", "3h", "4h", "6h", "8h", "12h", "1d")
DEFAULT_EVENTS: Final = (
    *(event for event in EVENTS if event not in ("labels-resumed", "source-restored")),
    "reminder",
    "report",
)
MAX_LEVELS: Final = 16
RAW: Final = ConfigDict(extra="forbid", frozen=True, strict=False, populate_by_name=True, arbitrary_types_allowed=True)


def seconds(text: object) -> int:
    """Seconds of a duration such as "90s", "10m", "6h", "10d", "52w".

    Raises ValueError for anything else.
    """
    if isinstance(text, bool) or not isinstance(text, str | int):
        raise ValueError(f'{text!r} is not a duration; write a whole number and a unit, for instance "10d"')
    if isinstance(text, int):
        raise ValueError(f'{text} has no unit; write for instance "{text}d" (units: s m h d w)')
    found = re.fullmatch(r"\s*(\d{1,9})\s*([smhdw])\s*", text)
    if not found:
        raise ValueError(f'{text!r} is not a duration; write a whole number and a unit (s m h d w), for instance "10d"')
    return int(found[1]) * _UNITS[found[2]]


def duration(span: int) -> str:
    """The shortest way to write a number of seconds as a duration."""
    for unit in ("w", "d", "h", "m"):
        if span and span % _UNITS[unit] == 0:
            return f"{span // _UNITS[unit]}{unit}"
    return f"{span}s"


def _positive_seconds(text: object) -> int:
    span = seconds(text)
    if span == 0:
        raise ValueError("must be longer than 0")
    return span


def _bucket(text: object) -> int:
    if text not in BUCKETS:
        raise ValueError(f"{text!r} is not a bucket width; allowed: {', '.join(BUCKETS)}")
    return seconds(text)


def _zone(name: object) -> str:
    try:
        zoneinfo.ZoneInfo(str(name))
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
        raise ValueError(
            f'{name!r} is not a known time zone; write an IANA name such as "Europe/Berlin" or "UTC"'
        ) from None
    return str(name)


def _aware(value: object) -> datetime:
    if isinstance(value, str):
        try:
            value = datetime.fromisoformat(value)
        except ValueError:
            raise ValueError(f"{value!r} is not a time; write for instance 2026-11-02T00:00:00Z") from None
    if not isinstance(value, datetime) or value.tzinfo is None:
        raise ValueError(f"{value} has no offset from UTC; write for instance 2026-11-02T00:00:00Z")
    return value.astimezone(UTC)


def _decimal(value: object) -> str:
    if isinstance(value, bool):
        raise ValueError(f"{value!r} is not a number")
    try:
        number = Decimal(str(value).strip())
    except InvalidOperation:
        raise ValueError(f"{value!r} is not a decimal number") from None
    if not number.is_finite() or number <= 0:
        raise ValueError(f"{value!r} must be greater than 0")
    return format(number.normalize(), "f")


def _text(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str | int | float):
        return str(value)
    raise ValueError(f"{value!r} must be text or a number")


Duration = Annotated[int, BeforeValidator(_positive_seconds)]
Span = Annotated[int, BeforeValidator(seconds)]
Zone = Annotated[str, BeforeValidator(_zone)]
Instant = Annotated[datetime, BeforeValidator(_aware)]
Level = Annotated[str, BeforeValidator(_decimal)]
Text = Annotated[str, BeforeValidator(_text)]
Name = Annotated[str, Field(min_length=1, max_length=80, pattern=r"^[^\x00-\x1f\x7f]+$")]


class Secret:
    """A text that does not show in repr, logs or tracebacks."""

    __slots__ = ("_text",)

    def __init__(self, text: str) -> None:
        self._text = text

    def reveal(self) -> str:
        """The text itself."""
        return self._text

    def __repr__(self) -> str:
        return "Secret('**********')"

    __str__ = __repr__


class _Table(BaseModel):
    model_config = RAW


def _no_password(url: str | None) -> str | None:
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


class LedgerTable(_Table):
    """Where the evidence is kept."""

    url: str | None = None
    url_env: str | None = None
    url_file: str | None = None

    _check = field_validator("url")(_no_password)


class WebTable(_Table):
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


class MetricsTable(_Table):
    """What /metrics shows."""

    slices: bool = True


class ReportTable(_Table):
    """When the weekly report is made."""

    at: str = "mon 06:00"
    fdr: Annotated[float, Field(gt=0, lt=1)] = 0.05

    @field_validator("at")
    @classmethod
    def _when(cls, value: str) -> str:
        if not re.fullmatch(r"(mon|tue|wed|thu|fri|sat|sun) ([01]\d|2[0-3]):[0-5]\d", value):
            raise ValueError(f'{value!r} is not a time of the week; write for instance "mon 06:00"')
        return value


class ColumnsTable(_Table):
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


class SourceTable(_Table):
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

    _check = field_validator("url")(_no_password)

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


class EvidenceTable(_Table):
    """What the tolerance was certified on."""

    labels: Annotated[int, Field(gt=0)]
    errors: Annotated[int, Field(ge=0)]
    models: Annotated[int, Field(gt=0)] = 1

    @model_validator(mode="after")
    def _fewer(self) -> EvidenceTable:
        if self.errors > self.labels:
            raise ValueError(f"errors = {self.errors} is more than labels = {self.labels}")
        return self


class PromiseTable(_Table):
    """One promise: its terms, and what may change freely beside them."""

    name: Name
    model: str = ""
    version: Annotated[Text, Field(min_length=1, max_length=80)] = "1"
    source: str
    where: dict[str, Text] = {}
    classes: tuple[Text, ...] = ()
    positive: Text | None = None
    measure: Measure = "error"
    tolerance: Annotated[float, Field(gt=0, lt=1)]
    risk: Annotated[float, Field(gt=0, lt=1)]
    released: Instant
    service_life: Duration = 52 * 604800
    bucket: Annotated[int, BeforeValidator(_bucket)] = 86400
    time_zone: Zone = "UTC"
    label_lag: Span
    count: Counting = "sealed"
    slices: dict[str, tuple[Text, ...] | dict[str, Level]] = {}
    weight_levels: tuple[Level, ...] = ()
    n_max: Annotated[int, Field(ge=1, le=1000)] | None = None
    cluster_span: Duration | None = None
    labelling_probabilities: tuple[Level, ...] = ()
    label_noise: tuple[float, float] | None = None
    window_at_least: Duration | None = None
    support_at_least: Duration = 7 * 86400
    warn_every: Duration = 1095 * 86400
    stale_after: Duration | None = None
    release_evidence: EvidenceTable | None = None
    uncertified: bool = False
    retired: bool = False
    unit: str = "sample"

    @model_validator(mode="after")
    def _whole(self) -> PromiseTable:
        for problem in _promise_problems(self):
            raise ValueError(problem)
        return self

    @property
    def staleness(self) -> int:
        """Seconds after which the newest label is too old."""
        return self.stale_after or max(7 * 86400, 2 * self.label_lag)

    def terms(self, source: SourceTable) -> Terms:
        """The terms to be frozen: everything that enters a probability or selects a row."""
        return Terms(
            promise=self.name,
            model=self.model,
            version=self.version,
            source=self.source,
            where=tuple(sorted(self.where.items())),
            columns=source.columns.record(),
            time_format=source.time_format,
            source_time_zone=source.time_zone,
            classes=tuple(sorted(self.classes)),
            positive=self.positive,
            measure=self.measure,
            tolerance=self.tolerance,
            risk=self.risk,
            released=int(self.released.timestamp()),
            service_life=self.service_life,
            bucket=self.bucket,
            time_zone=self.time_zone,
            label_lag=self.label_lag,
            count=self.count,
            slices=tuple(_slice(column, values) for column, values in sorted(self.slices.items())),
            weight_levels=self.weight_levels,
            n_max=self.n_max,
            cluster_span=self.cluster_span,
            labelling_probabilities=self.labelling_probabilities,
            label_noise=self.label_noise,
            window_at_least=self.window_at_least,
            support_at_least=self.support_at_least,
            warn_every=self.warn_every,
        )


def _slice(column: str, values: tuple[str, ...] | dict[str, str]) -> Slice:
    if isinstance(values, dict):
        return Slice(column, tuple(values), tuple(values.values()))
    return Slice(column, values, ("1",) * len(values))


def _promise_problems(promise: PromiseTable) -> list[str]:
    found = []
    if promise.released.microsecond:
        found.append(f"released = {promise.released} must be a whole second")
    if promise.measure in ("miss", "false-alarm") and promise.positive is None:
        found.append(f'measure = "{promise.measure}" needs positive: the label that counts as positive')
    if promise.positive is not None and promise.classes and promise.positive not in promise.classes:
        found.append(f"positive = {promise.positive!r} is not among classes = {list(promise.classes)}")
    for key in ("weight_levels", "labelling_probabilities"):
        levels = getattr(promise, key)
        if len(levels) > MAX_LEVELS or len(set(levels)) != len(levels):
            found.append(f"{key} must hold at most {MAX_LEVELS} different values")
    if any(Decimal(level) > 1 for level in promise.labelling_probabilities):
        found.append("labelling_probabilities must be at most 1")
    if promise.label_noise is not None:
        low, high = promise.label_noise
        if not (0 <= low <= high and low + high < 1):
            found.append(f"label_noise = [{low}, {high}] must satisfy 0 <= a <= b and a + b < 1")
        elif promise.measure == "loss":
            found.append("label_noise is about flipped errors and does not go with measure = 'loss'")
    for column, values in promise.slices.items():
        if len(set(values)) != len(values):
            found.append(f"slices.{column} names a value twice")
    return found


class RouteTable(_Table):
    """One way on which notices leave."""

    name: Name
    kind: Literal["log", "webhook", "email", "command"]
    url: str | None = None
    url_env: str | None = None
    url_file: str | None = None
    secret_env: str | tuple[str, ...] | None = None
    secret_file: str | None = None
    ca_file: str | None = None
    host: str | None = None
    port: Annotated[int, Field(gt=0, le=65535)] | None = None
    security: Literal["starttls", "tls", "none"] = "starttls"
    username: str | None = None
    password_env: str | None = None
    password_file: str | None = None
    sender: str | None = None
    to: tuple[str, ...] = ()
    command: tuple[str, ...] = ()
    environment: tuple[str, ...] = ()
    timeout: Duration = 10
    retrain: bool = False
    events: tuple[str, ...] = DEFAULT_EVENTS
    heartbeat: Duration | None = None
    promises: tuple[str, ...] = ()
    """Only notices of these promises; empty: all."""

    _check = field_validator("url")(_no_password)

    @field_validator("events")
    @classmethod
    def _known(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        for event in value:
            if event not in (*EVENTS, "report", "reminder"):
                raise ValueError(
                    f"{event!r} is no event{_nearest(event, EVENTS)}; allowed: {', '.join(EVENTS)}, report, reminder"
                )
        return value

    @model_validator(mode="after")
    def _way(self) -> RouteTable:
        if self.kind == "webhook" and sum(x is not None for x in (self.url, self.url_env, self.url_file)) != 1:
            raise ValueError('kind = "webhook" needs exactly one of url, url_env, url_file')
        if self.kind == "email" and not (self.host and self.sender and self.to):
            raise ValueError('kind = "email" needs host, sender and to')
        if self.kind == "command" and not self.command:
            raise ValueError('kind = "command" needs command, a list of arguments')
        return self


class Settings(_Table):
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


def read(path: Path, environment: Mapping[str, str] | None = None) -> Settings:
    """The configuration in a TOML file. Raises SettingsError with every problem found."""
    try:
        text = path.read_text(encoding="utf-8")
    except OSError as error:
        raise SettingsError(
            [f"{path}: cannot be read ({error.strerror}); `watcher draft FILE` writes one to start from"]
        ) from None
    except UnicodeDecodeError:
        raise SettingsError([f"{path}: is not UTF-8 text"]) from None
    return parse(text, path.resolve().parent, os.environ if environment is None else environment, str(path))


def parse(text: str, folder: Path, environment: Mapping[str, str], name: str = "configuration") -> Settings:
    """The configuration in a TOML text; `folder` is what relative paths start from."""
    try:
        tree = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SettingsError([f"{name}: is not TOML: {error}"]) from None
    for key in ("folder", "environment"):
        if key in tree:
            raise SettingsError([f"{name}: {key}: unknown key"])
    try:
        settings = Settings(**tree, folder=folder, environment=environment)
    except ValidationError as error:
        raise SettingsError([f"{name}: {told}" for told in _all_told(error.errors(), tree)]) from None
    problems = _across(settings)
    if problems:
        raise SettingsError([f"{name}: {problem}" for problem in problems])
    return settings


def _across(settings: Settings) -> list[str]:
    found = []
    names: Sequence[str]
    for kind in ("source", "route"):
        names = [table.name for table in getattr(settings, kind)]
        found += [f"{kind} {name!r} is declared twice" for name in sorted({n for n in names if names.count(n) > 1})]
    versions = [(promise.name, promise.version) for promise in settings.promise]
    found += [
        f"promise {name!r} version {v!r} is declared twice"
        for name, v in sorted({x for x in versions if versions.count(x) > 1})
    ]
    names = tuple(source.name for source in settings.source)
    for promise in settings.promise:
        if promise.source not in names:
            found.append(
                f"promise {promise.name!r}: source = {promise.source!r} is not declared{_nearest(promise.source, names)}; add a [[source]] of that name"
            )
            continue
        found += [
            f"promise {promise.name!r}: {problem}"
            for problem in _against(promise, settings.source_of(promise.source).columns)
        ]
    return found


def _against(promise: PromiseTable, columns: ColumnsTable) -> list[str]:
    found = []
    if (promise.measure == "loss") != (columns.loss is not None):
        found.append("measure = 'loss' and a mapped loss column belong together")
    if promise.measure in ("miss", "false-alarm") and columns.label is None:
        found.append(f"measure = {promise.measure!r} needs a label column, not error")
    if bool(promise.weight_levels) != (columns.weight is not None):
        found.append("weight_levels and a mapped weight column belong together")
    if (promise.n_max is not None) != (columns.cluster is not None) or (promise.cluster_span is not None) != (
        columns.cluster is not None
    ):
        found.append("n_max, cluster_span and a mapped cluster column belong together")
    if bool(promise.labelling_probabilities) != (columns.labelling_probability is not None):
        found.append(
            "labelling_probabilities and the mapped columns labelling_probability and selected belong together"
        )
    designs = [key for key in ("weight_levels", "n_max", "labelling_probabilities") if getattr(promise, key)]
    if len(designs) > 1:
        found.append(f"{' and '.join(designs)} describe different sampling designs; declare one")
    if designs and promise.count == "arriving":
        found.append(
            f'count = "arriving" does not go with {designs[0]}: such samples count when their bucket is sealed; use count = "sealed"'
        )
    if designs and promise.measure == "loss":
        found.append(f"measure = 'loss' does not go with {designs[0]}")
    return found


def _nearest(word: str, known: Sequence[str]) -> str:
    close = difflib.get_close_matches(word, known, 1, 0.5)
    return f" (did you mean {close[0]!r}?)" if close else ""


def _all_told(entries: Sequence[Any], tree: Mapping[str, Any]) -> list[str]:
    """The findings as sentences; what only follows from another finding is left out."""
    places = [tuple(entry["loc"]) for entry in entries]
    told = []
    for entry, place in zip(entries, places, strict=True):
        follows = entry["type"] == "too_short" and any(p[: len(place)] == place and p != place for p in places)
        wrong_branch = entry["type"] in ("tuple_type", "dict_type") and any(
            p[:-1] == place[:-1] and p != place for p in places
        )
        if not follows and not wrong_branch:
            told.append(_told(entry, tree))
    return list(dict.fromkeys(told))


def _told(entry: Any, tree: Mapping[str, Any]) -> str:
    """One pydantic finding as a sentence with the place in the words of the file."""
    place = _place(entry["loc"], tree)
    kind, message = entry["type"], entry["msg"].removeprefix("Value error, ")
    if kind == "extra_forbidden":
        known = sorted(_keys_at(entry["loc"][:-1]))
        return f"{place}: unknown key{_nearest(str(entry['loc'][-1]), known)}; known keys here: {', '.join(known)}"
    if kind == "missing":
        return f"{place}: is required"
    given = entry.get("input")
    shown = (
        f" = {given!r}"
        if isinstance(given, str | int | float | bool) and not str(place).endswith(("url", "secret"))
        else ""
    )
    return f"{place}{shown if 'Value error' not in entry['msg'] else ''}: {message}"


def _place(loc: tuple[int | str, ...], tree: Mapping[str, Any]) -> str:
    words: list[str] = []
    node: Any = tree
    for step in loc:
        if isinstance(step, int):
            inside = node[step] if isinstance(node, list) and step < len(node) else None
            name = inside.get("name") if isinstance(inside, dict) else None
            words[-1] += f" {name!r}" if isinstance(name, str) else f" number {step + 1}"
            node = inside
        elif step.startswith(("tuple[", "dict[", "function-")):
            continue
        else:
            words.append(str(step))
            node = node.get(step) if isinstance(node, dict) else None
    return ": ".join(words)


def _keys_at(loc: tuple[int | str, ...]) -> list[str]:
    """The keys that are known at a place of the file."""
    hidden = {"folder", "environment"}
    table: type[BaseModel] = Settings
    inner: dict[str, type[BaseModel]] = {
        "ledger": LedgerTable,
        "web": WebTable,
        "metrics": MetricsTable,
        "report": ReportTable,
        "source": SourceTable,
        "promise": PromiseTable,
        "route": RouteTable,
        "columns": ColumnsTable,
        "release_evidence": EvidenceTable,
    }
    for step in loc:
        if isinstance(step, str):
            table = inner.get(step, table)
    return [name for name in table.model_fields if name not in hidden]
