"""The first stages of the statement: what a row says, in one spelling, and where in time it lies."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from typing import Any, Final, Literal

import sqlalchemy as sa

from watcher.buckets import LAST_SECOND, bucket_offsets, wall_offsets
from watcher.records import REASONS, Question
from watcher.sources import dialects
from watcher.sources.normal import SECONDS, text_of

Held = Literal["text", "instant", "wall", "number", "typed"]
"""What a column holds: text; a date and time with or without offset; a number; anything else with a type."""

USABLE: Final = 0
OUTSIDE: Final = 1
DUPLICATE: Final = 2
_FIRST_REASON: Final = 10
TRUE: Final = ("1", "true")
FALSE: Final = ("0", "false")
MARGIN: Final = 3 * 86_400
"""Seconds beyond the range asked for over which the zone's offsets are bound; no zone is a day off UTC."""

Expression = sa.ColumnElement[Any]


def kind_of(reason: str) -> int:
    """Return the number that stands for a reason in the column `kind`."""
    return _FIRST_REASON + REASONS.index(reason)


def reason_of(kind: int) -> str | None:
    """Return the reason that a kind stands for; None for usable, outside and duplicate."""
    return REASONS[kind - _FIRST_REASON] if kind >= _FIRST_REASON else None


@dataclass(frozen=True, slots=True)
class Table:
    """What a statement reads: a selectable, its columns by their name in the source, and what each of them holds."""

    rows: sa.FromClause
    columns: Mapping[str, sa.ColumnElement[Any]]
    holds: Mapping[str, Held]
    extra: tuple[str, ...] = ()
    """Names of columns of `rows` to carry along for `rejected_rows`: file and line."""


def parts_of(question: Question) -> list[str]:
    """Return the names of all columns that a question reads, each once."""
    mapped = [
        value for field in fields(question.columns) if (value := getattr(question.columns, field.name)) is not None
    ]
    return list(dict.fromkeys([*mapped, *question.slices, *(name for name, _ in question.where)]))


@dataclass(frozen=True, slots=True)
class Stages:
    """The stages from the rows as they are held to rows of one spelling, each in its place in time."""

    question: Question
    table: Table
    suspects: sa.FromClause | None = None
    """A table of digests (`digest`) of the ids that may occur more than once: only their rows are ranked."""
    unique: bool = False
    """True: no id occurs twice, so nothing needs to be ranked."""
    raw: bool = False
    """True: the values as read are carried along."""
    prefix: str = ""
    """Of the names of the stages, which stand beside one another: nested ones overflow SQLite's parser."""

    def here(self, rows: sa.CTE) -> Expression:
        """Whether a row meets the question's `where`."""
        return sa.not_(sa.or_(sa.false(), *self._elsewhere(rows)))

    def slice_columns(self, rows: sa.CTE) -> list[Expression]:
        """Return the columns of a stage that hold the slice values."""
        return [rows.c[self._slice(name)] for name in self.question.slices]

    def _parts(self) -> dict[str, str]:
        """Return part -> column of the source for every mapped part, slices and conditions included."""
        c = self.question.columns
        parts = {
            name: column
            for name in (
                "id",
                "revision",
                "prediction",
                "label",
                "error",
                "loss",
                "weight",
                "cluster",
                "labelling_probability",
                "selected",
            )
            if (column := getattr(c, name)) is not None
        }
        parts |= {self._slice(name): name for name in self.question.slices}
        parts |= {f"where{i}": name for i, (name, _) in enumerate(self.question.where)}
        return parts

    def _slice(self, name: str) -> str:
        return f"slice{self.question.slices.index(name)}"

    def _times(self) -> dict[str, str]:
        c = self.question.columns
        return {"time": c.time} | ({"labelled_at": c.labelled_at} if c.labelled_at else {})

    def _exact(self, since: int | None = None, *, gathered: bool = False, among: bool | None = None) -> sa.CTE:
        """Every part as the source holds it, texts to be compared byte by byte; no row is left out but by an index.

        `among`: only the rows whose id is among the suspects (True) or not (False). `gathered`: of the id only whether
        there is one.
        """
        columns, holds = self.table.columns, self.table.holds
        source: sa.FromClause = self.table.rows
        picked: list[Expression] = [
            dialects.Exact(columns[column]).label(part) for part, column in self._parts().items() if part != "id"
        ]
        picked += [
            (dialects.Exact(columns[column]) if holds[column] == "text" else columns[column]).label(part)
            for part, column in self._times().items()
        ]
        if self.question.columns.id:
            trimmed: Expression = dialects.Trimmed(columns[self.question.columns.id])
            # a text from "!" on has no blank in front: most need not be trimmed to know that there is an id
            exact_id = dialects.Exact(columns[self.question.columns.id])
            known: Expression = sa.case((exact_id >= "!", "1"), (trimmed != "", "1"))
            picked.append((known if gathered and among is None else trimmed).label("id"))
        if self.raw:
            picked += [columns[name].label(f"raw{i}") for i, name in enumerate(parts_of(self.question))]
            picked += [self.table.rows.c[name].label(f"extra{i}") for i, name in enumerate(self.table.extra)]
        select = sa.select(*picked).select_from(source)
        time = self.question.columns.time
        if since is not None and holds[time] == "instant":  # lets an index on the time column bound the read
            bound = sa.func.to_timestamp(since, type_=sa.DateTime(timezone=True))
            select = select.where(sa.or_(columns[time] >= bound, columns[time].is_(None)))
        exact = self._stage("exact", select)
        if among is None:
            return exact
        assert self.suspects is not None
        digests = sa.select(self.suspects.c.digest)
        value = sa.func.nullif(dialects.Plain(exact.c.id), "")
        rest = [column for column in exact.c if column.name != "id"]
        marked = self._stage("marked", sa.select(*rest, value.label("id")))
        digest = dialects.Digest(marked.c.id)
        if among:
            # asked as a CASE, which DuckDB answers with one look-up a row; a bare IN took twice the time of the whole scan
            return self._stage("suspected", sa.select(marked).where(sa.case((digest.in_(digests), 1), else_=0) == 1))
        rest = [column for column in marked.c if column.name != "id"]
        presence = sa.case((marked.c.id.is_not(None), "1")).label("id")
        alone = sa.or_(marked.c.id.is_(None), digest.not_in(digests))
        return self._stage("alone", sa.select(*rest, presence).where(alone))

    def _identified(self) -> sa.CTE:
        """The normalised id alone."""
        column = self.table.columns[self.question.columns.id or ""]
        trimmed = self._stage(
            "trimmed_id", sa.select(dialects.Trimmed(column).label("id")).select_from(self.table.rows)
        )
        return self._stage("plain_id", sa.select(sa.func.nullif(dialects.Plain(trimmed.c.id), "").label("id")))

    def _stage(self, name: str, select: sa.Select[Any] | sa.CompoundSelect[Any]) -> sa.CTE:
        # SQLite would flatten the stages and call its functions again for every mention of a column.
        return select.cte(self.prefix + name).prefix_with("MATERIALIZED", dialect="sqlite")

    def _timed(self, exact: sa.CTE) -> sa.CTE:
        """Turn the columns of time into seconds since 1970; NULL where they cannot be read or are not believed."""
        rest = [column for column in exact.c if column.name not in ("time", "labelled_at")]
        picked: list[Expression] = []
        for part, column in self._times().items():
            value, held = exact.c[part], self.table.holds[column]
            picked += [reading.label(f"{part}_{name}") for name, reading in self._readings(value, held).items()]
            if part == "labelled_at":
                trimmed = sa.func.coalesce(dialects.Trimmed(value), "") if held == "text" else None
                given = trimmed != "" if trimmed is not None else value.is_not(None)
                picked.append(sa.case((given, 1), else_=0).label("labelled_at_given"))
        read = self._stage("readings", sa.select(*rest, *picked))
        given_too = [read.c.labelled_at_given] if self.question.columns.labelled_at else []
        instants = [self._instant(read, part).label(f"{part}_at") for part in self._times()]
        rows = self._stage("instants", sa.select(*[read.c[column.name] for column in rest], *given_too, *instants))
        names = {"time_at": "at", "labelled_at_at": "labelled_at"}
        kept = [column for column in rows.c if column.name not in names]
        believed = [
            sa.case((rows.c[name].between(0, LAST_SECOND), rows.c[name])).label(label)
            for name, label in names.items()
            if name in rows.c
        ]
        return self._stage("timed", sa.select(*kept, *believed))

    def _readings(self, value: Expression, held: Held) -> dict[str, Expression]:
        """Read a column of time: `zoned` seconds since 1970, or `wall` seconds on a clock of the source's zone, or both."""
        q = self.question
        units: Expression = sa.literal_column(str(SECONDS.get(q.time_format, 1)))
        if held == "text":
            if q.time_format in SECONDS:
                return {"zoned": dialects.Count(value, units)}
            zoned: dict[str, Expression] = {"zoned": dialects.Zoned(value)}
            return zoned | ({"wall": dialects.Wall(value)} if q.source_time_zone else {})
        if held == "number":
            return {"zoned": dialects.Amount(value, units)}
        return {"zoned" if held == "instant" else "wall": dialects.Stamp(value)}

    def _instant(self, read: sa.CTE, part: str) -> Expression:
        found: list[Expression] = [read.c[f"{part}_zoned"]] if f"{part}_zoned" in read.c else []
        if f"{part}_wall" in read.c:
            wall = read.c[f"{part}_wall"]
            found.append(wall - self._zone(wall))
        return found[0] if len(found) == 1 else sa.func.coalesce(*found)

    def _moments(self, timed: sa.CTE) -> sa.CTE:
        """Say of each row what follows from its times alone: its place, whether its label is late, what is ahead."""
        q, c = self.question, self.question.columns
        at = timed.c.at
        bad: Expression = at.is_(None)
        if c.labelled_at:
            bad = sa.or_(bad, sa.and_(timed.c.labelled_at_given == 1, timed.c.labelled_at.is_(None)))
        kinds: list[tuple[Any, int]] = [(at < self._since(), OUTSIDE)]
        if q.at_given:
            kinds.append((at >= q.now, OUTSIDE))
        kinds += self._reason("bad-time", bad)
        kinds += self._reason("future-time", at > q.now)
        kept = [column for column in timed.c if column.name not in ("labelled_at", "labelled_at_given")]
        picked: list[Expression] = [*kept, case_of(kinds, "moment"), self._local(at).label("bucket")]
        if c.labelled_at:
            after = timed.c.labelled_at
            late = sa.or_(after >= q.now, self._local(after - q.label_lag) > self._local(at))
            picked.append(sa.case((late, 1), else_=0).label("late"))
        if c.labelled_at or q.at_given:
            later = [at >= q.now, *([timed.c.labelled_at >= q.now] if c.labelled_at else [])]
            picked.append(sa.case((sa.or_(*later), 1), else_=0).label("ahead"))
        return self._stage("moments", sa.select(*picked))

    def _gathered(self, moments: sa.CTE) -> sa.CTE:
        """Put rows together that no later stage can tell apart: few are left, and only these are normalised and judged."""
        place = sa.case((moments.c.moment == USABLE, moments.c.bucket)).label("bucket")
        keys = [column for column in moments.c if column.name not in ("at", "bucket")]
        spans = self._stage("spans", sa.select(*keys, place, moments.c.at))
        group = [column for column in spans.c if column.name != "at"]
        number = sa.cast(sa.func.count(), sa.BigInteger).label("n")
        return self._stage("gathered", sa.select(*group, sa.func.max(spans.c.at).label("at"), number).group_by(*group))

    def _texts(self, rows: sa.CTE) -> sa.CTE:
        """Bring every text into its one spelling and read the numbers."""
        parts = self._parts()
        rest = [column for column in rows.c if column.name not in parts]
        trimmed = self._stage(
            "trimmed", sa.select(*rest, *[dialects.Trimmed(rows.c[part]).label(part) for part in parts])
        )
        picked: list[Expression] = [trimmed.c[column.name] for column in rest]
        for part in parts:
            value = trimmed.c[part]
            if part in ("weight", "loss", "labelling_probability"):
                picked.append(dialects.Number(value).label(part))
            else:
                picked.append(sa.func.nullif(dialects.Plain(value), "").label(part))
            if part == "loss":
                picked.append(sa.func.nullif(value, "").label("loss_text"))
        return self._stage("texts", sa.select(*picked))

    def _zone(self, wall: Expression) -> Expression:
        q = self.question
        assert q.source_time_zone is not None
        pieces = wall_offsets(q.released - MARGIN, max(q.now, q.released) + MARGIN, q.source_time_zone)
        return stepwise(wall, pieces)

    def _local(self, epoch: Expression) -> Expression:
        """Return the wall clock seconds at which the bucket of `epoch` nominally starts (see `buckets.py`)."""
        q = self.question
        pieces = bucket_offsets(self._since() - MARGIN, max(q.now, q.released) + MARGIN, q.bucket, q.time_zone)
        offset = stepwise(epoch, pieces)
        wall = epoch if len(pieces) == 1 and pieces[0][1] == 0 else epoch + offset
        return wall - wall % sa.literal_column(str(q.bucket))

    def _since(self) -> int:
        """The time from which rows are read: clusters that began before the open range must be recognised."""
        q = self.question
        return q.open_from - (q.cluster_span or 0 if q.columns.cluster else 0)

    def _elsewhere(self, rows: sa.CTE) -> list[Expression]:
        conditions: list[Expression] = []
        for i, (_, wanted) in enumerate(self.question.where):
            column, value = rows.c[f"where{i}"], text_of(wanted)
            conditions.append(column.is_not(None) if value is None else sa.func.coalesce(column, "") != value)
        return conditions

    def _outcome_raw(self, rows: sa.CTE) -> Expression:
        """The column that says whether a row is labelled."""
        c = self.question.columns
        return rows.c.loss_text if c.loss else rows.c.error if c.error else rows.c.label

    def placed(self, since: int | None = None, *, gather: bool = False, among: bool | None = None) -> sa.CTE:
        """Give each row the kind that follows from its times, `where` and its having an id; `n` rows are alike."""
        c = self.question.columns
        gather = gather and not self.raw and not c.cluster
        rows = self._moments(self._timed(self._exact(since, gathered=gather, among=among)))
        rows = self._texts(self._gathered(rows) if gather else rows)
        kinds: list[tuple[Any, Any]] = [(condition, OUTSIDE) for condition in self._elsewhere(rows)]
        kinds.append((rows.c.moment == OUTSIDE, OUTSIDE))
        kinds += self._reason("no-id", rows.c.id.is_(None)) if c.id else []
        kinds.append((rows.c.moment != USABLE, rows.c.moment))
        unlabelled = [rows.c.late == 1] if c.labelled_at else []
        if c.selected:
            unlabelled.append(sa.func.coalesce(rows.c.selected, "").not_in(TRUE))
        outcome = self._outcome_raw(rows)
        if unlabelled:
            outcome = sa.case((sa.or_(*unlabelled), None), else_=outcome)
        kept = [column for column in rows.c if column.name != "moment"]
        number = [] if gather else [sa.literal_column("1", sa.BigInteger()).label("n")]
        return self._stage("placed", sa.select(*kept, *number, case_of(kinds), outcome.label("outcome")))

    def _reason(self, reason: str, condition: Expression) -> list[tuple[Any, int]]:
        """One branch of `kind`; tests take branches away here to see that their absence is noticed."""
        return [(condition, kind_of(reason))]


def one(condition: Expression) -> Expression:
    """Return 1 where a condition holds, else 0."""
    return sa.case((condition, 1), else_=0)


def total(column: Expression, name: str) -> sa.Label[Any]:
    """Return a sum as a 64-bit integer: some engines add integers up to decimals."""
    return sa.cast(sa.func.sum(column), sa.BigInteger).label(name)


def case_of(kinds: Sequence[tuple[Any, Any]], name: str = "kind") -> sa.Label[Any]:
    """Return the first kind whose condition holds, else usable."""
    kind: Expression = sa.case(*kinds, else_=USABLE) if kinds else sa.literal(USABLE)
    return kind.label(name)


def stepwise(x: Expression, pieces: Sequence[tuple[int, int | None]]) -> Expression:
    """Return the value of the piece that `x` lies in; before the first piece, the first piece's value."""
    values = [sa.null() if value is None else sa.literal_column(str(value), sa.BigInteger()) for _, value in pieces]
    if len(pieces) == 1:
        return values[0]
    return sa.case(*[(x < pieces[i + 1][0], values[i]) for i in range(len(pieces) - 1)], else_=values[-1])
