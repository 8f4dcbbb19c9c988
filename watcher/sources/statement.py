"""The one statement: how rows become integers, as SQLAlchemy Core, for every engine.

Each stage is a SELECT from the one before:

    exact -> timed -> moments -> [gathered] -> texts -> placed -> [ranked] -> judged -> [clustered] -> counted

Each row ends in exactly one `kind`: usable, outside, duplicate, or the first reason that applies, in the order of
`records.REASONS`. Names of columns and values of the outside world enter as quoted names and bound values only.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any, Final, Literal

import sqlalchemy as sa

from watcher.buckets import LAST_SECOND, bucket_offsets, wall_offsets
from watcher.errors import UsageError
from watcher.records import REASONS, Question
from watcher.sources import dialects
from watcher.sources.normal import SECONDS, text_of

Held = Literal["text", "instant", "wall", "number", "typed"]
"""What a column holds: text; a date and time with or without offset; a number; anything else with a type."""

USABLE: Final = 0
OUTSIDE: Final = 1
DUPLICATE: Final = 2
_FIRST_REASON: Final = 10
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
class Statement:
    """Builds what one question asks of one table."""

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

    # --- what is asked ------------------------------------------------------------------------------------------------

    def counted(self, slices: Sequence[str]) -> sa.Select[Any]:
        """Count by kind, bucket, level and the given slice columns (crossed). With clusters: at most one slice column."""
        rows = self._judged()
        q = self.question
        usable = rows.c.kind == USABLE
        keys = [
            rows.c.kind,
            sa.case((usable, rows.c.bucket)).label("bucket"),
            *[
                sa.case((usable, sa.func.coalesce(rows.c[self._slice(name)], ""))).label(f"k{i}")
                for i, name in enumerate(slices)
            ],
        ]
        labelled = sa.and_(usable, rows.c.outcome.is_not(None))
        sums = self._flags(rows, labelled)
        ahead = [rows.c.ahead] if "ahead" in rows.c else []
        if q.columns.cluster:
            return self._by_cluster(rows, keys, sums, labelled)
        level = self._level(rows, usable, labelled)
        flat = sa.select(
            *keys,
            level.label("level"),
            rows.c.n,
            *[(flag * rows.c.n).label(name) for name, flag in sums.items()],
            sa.case((labelled, rows.c.at)).label("newest"),
            *ahead,
        ).cte(f"{self.prefix}flat")
        group = [flat.c[key.name] for key in keys] + [flat.c.level]
        return sa.select(
            *group,
            _sum(flat.c.n, "predictions"),
            *[_sum(flat.c[name], name) for name in sums],
            sa.func.max(flat.c.newest).label("newest"),
            *[sa.func.max(flat.c.ahead).label("ahead") for _ in ahead],
        ).group_by(*group)

    def values(self, rows: int | None = None) -> sa.Select[Any]:
        """Count the distinct values of each slice column among the rows that have a place in time, or some of them."""
        placed = self._placed()
        names = [self._slice(name) for name in self.question.slices]
        some = sa.select(*[placed.c[name] for name in names]).where(placed.c.kind == USABLE)
        some_rows = (some.limit(rows) if rows is not None else some).cte("some")
        return sa.select(*[sa.func.count(sa.distinct(some_rows.c[name])).label(name) for name in names])

    def repeated(self) -> sa.Select[Any]:
        """Select the digests of the ids that may occur more than once, whatever becomes of their rows."""
        marked = self._identified()
        digest = dialects.Digest(marked.c.id).label("digest")
        digests = sa.select(digest).where(marked.c.id.is_not(None)).cte("digests")
        return sa.select(digests.c.digest).group_by(digests.c.digest).having(sa.func.count() > 1)

    def late_labels(self) -> sa.Select[Any]:
        """Count the labels of sealed buckets that came at or after their bucket's end + label_lag, once an id."""
        q = self.question
        timed = self._texts(self._timed(self._exact(since=q.released)))
        late = sa.and_(
            timed.c.at >= q.released,
            timed.c.at < q.open_from,
            timed.c.labelled_at < q.now,
            self._local(timed.c.labelled_at - q.label_lag) > self._local(timed.c.at),
            self._outcome_raw(timed).is_not(None),
            *[sa.not_(condition) for condition in self._elsewhere(timed)],
        )
        what = sa.func.count(sa.distinct(timed.c.id)) if q.columns.id else sa.func.count()
        return sa.select(sa.cast(what, sa.BigInteger)).select_from(timed).where(late)

    def rejected_rows(self, reason: str, limit: int) -> sa.Select[Any]:
        """Select the values, as read, of rows that were rejected for `reason`, as columns raw0, raw1, ... and extra0, ...

        Their order is that of `parts_of(question)` and `Table.extra`.
        """
        rows = replace(self, raw=True)._judged()
        raw = [rows.c[f"raw{i}"] for i in range(len(parts_of(self.question)))]
        extra = [rows.c[f"extra{i}"] for i in range(len(self.table.extra))]
        return sa.select(*raw, *extra).where(rows.c.kind == kind_of(reason)).order_by(*extra, *raw).limit(limit)

    def looked_at(self) -> sa.CTE:
        """Return all rows with normalised texts and `at`, for a survey."""
        return self._texts(self._timed(self._exact()))

    def here(self, rows: sa.CTE) -> Expression:
        """Whether a row meets the question's `where`."""
        return sa.not_(sa.or_(sa.false(), *self._elsewhere(rows)))

    def slice_columns(self, rows: sa.CTE) -> list[Expression]:
        """Return the columns of a stage that hold the slice values."""
        return [rows.c[self._slice(name)] for name in self.question.slices]

    # --- the stages ---------------------------------------------------------------------------------------------------

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
            trimmed = dialects.Trimmed(columns[self.question.columns.id])
            # a text from "!" on has no blank in front: most need not be trimmed to know that there is an id
            exact_id = dialects.Exact(columns[self.question.columns.id])
            presence = sa.case((exact_id >= "!", "1"), (trimmed != "", "1"))
            picked.append((presence if gathered and among is None else trimmed).label("id"))
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
        return select.cte(self.prefix + name)

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
        units = sa.literal_column(str(SECONDS.get(q.time_format, 1)))
        if held == "text":
            if q.time_format in SECONDS:
                return {"zoned": dialects.Count(value, units)}
            zoned: dict[str, Expression] = {"zoned": dialects.Zoned(value)}
            return zoned | ({"wall": dialects.Wall(value)} if q.source_time_zone else {})
        if held == "number":
            return {"zoned": dialects.Amount(value, units)}
        return {"zoned" if held == "instant" else "wall": dialects.Stamp(value)}

    def _instant(self, read: sa.CTE, part: str) -> Expression:
        found = [read.c[f"{part}_zoned"]] if f"{part}_zoned" in read.c else []
        if f"{part}_wall" in read.c:
            wall = read.c[f"{part}_wall"]
            found.append(wall - self._zone(wall))
        return found[0] if len(found) == 1 else sa.func.coalesce(*found)

    def _moments(self, timed: sa.CTE) -> sa.CTE:
        """Say of each row what follows from its times alone: its place, whether its label is late, what is ahead."""
        q, c = self.question, self.question.columns
        at = timed.c.at
        bad = at.is_(None)
        if c.labelled_at:
            bad = sa.or_(bad, sa.and_(timed.c.labelled_at_given == 1, timed.c.labelled_at.is_(None)))
        kinds: list[tuple[Any, int]] = [(at < self._since(), OUTSIDE)]
        if q.at_given:
            kinds.append((at >= q.now, OUTSIDE))
        kinds += self._reason("bad-time", bad)
        kinds += self._reason("future-time", at > q.now)
        kept = [column for column in timed.c if column.name not in ("labelled_at", "labelled_at_given")]
        picked: list[Expression] = [*kept, _kind(kinds, "moment"), self._local(at).label("bucket")]
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
        return _stepwise(wall, pieces)

    def _local(self, epoch: Expression) -> Expression:
        """Return the wall clock seconds at which the bucket of `epoch` nominally starts (see `buckets.py`)."""
        q = self.question
        pieces = bucket_offsets(self._since() - MARGIN, max(q.now, q.released) + MARGIN, q.bucket, q.time_zone)
        offset = _stepwise(epoch, pieces)
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

    def _placed(self, since: int | None = None, *, gather: bool = False, among: bool | None = None) -> sa.CTE:
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
            unlabelled.append(sa.func.coalesce(rows.c.selected, "").not_in(_TRUE))
        outcome = self._outcome_raw(rows)
        if unlabelled:
            outcome = sa.case((sa.or_(*unlabelled), None), else_=outcome)
        kept = [column for column in rows.c if column.name != "moment"]
        number = [] if gather else [sa.literal_column("1", sa.BigInteger()).label("n")]
        return self._stage("placed", sa.select(*kept, *number, _kind(kinds), outcome.label("outcome")))

    def _reason(self, reason: str, condition: Expression) -> list[tuple[Any, int]]:
        """One branch of `kind`; tests take branches away here to see that their absence is noticed."""
        return [(condition, kind_of(reason))]

    def _ranked(self) -> sa.CTE:
        """Leave one row of each id usable: in time before late, the highest revision, and nothing if the rest disagrees."""
        c = self.question.columns
        if not c.id or self.unique:
            return self._placed(gather=True)
        live_ = replace(self, prefix="live_")
        if self.suspects is not None:
            alone, some = self._placed(gather=True, among=False), live_._placed(among=True)
            others = sa.select(alone)
        else:
            alone, live = self._placed(gather=True), live_._placed(self._since())
            some = self._stage("some", sa.select(live).where(live.c.kind == USABLE))
            others = sa.select(alone).where(alone.c.kind != USABLE)
        order = self._order(some)
        rank = (
            sa.func.rank().over(partition_by=[some.c.kind, some.c.id], order_by=order)
            if order
            else sa.literal_column("1")
        )
        first = self._stage("first", sa.select(*some.c, rank.label("rank"), self._says(some).label("says")))
        group = [first.c.kind, first.c.id, first.c.rank]
        rest = self._rest(first)
        second = self._stage(
            "second",
            sa.select(
                *first.c,
                sa.func.row_number().over(partition_by=group, order_by=[first.c.says, *rest]).label("number"),
                sa.func.min(first.c.says).over(partition_by=group).label("least"),
                sa.func.max(first.c.says).over(partition_by=group).label("most"),
            ),
        )
        kinds: list[tuple[Any, Any]] = [(second.c.kind != USABLE, second.c.kind), (second.c.rank > 1, DUPLICATE)]
        kinds += self._reason("conflicting-duplicate", second.c.least != second.c.most)
        kinds.append((second.c.number > 1, DUPLICATE))
        kind = _kind(kinds)
        ranked = sa.select(*[kind if column.name == "kind" else second.c[column.name] for column in alone.c])
        return self._stage("ranked", sa.union_all(ranked, others))

    def _rest(self, rows: sa.CTE) -> list[Expression]:
        """By what equal rows are put in order: whichever engine counts, the same one stands for all of them."""
        texts = ["cluster", "selected", *[self._slice(name) for name in self.question.slices]]
        numbers = [
            sa.func.coalesce(rows.c[name], -1.0) for name in ("weight", "labelling_probability") if name in rows.c
        ]
        return [*numbers, *[sa.func.coalesce(rows.c[name], "") for name in texts if name in rows.c]]

    def _order(self, rows: sa.CTE) -> list[Expression]:
        order: list[Expression] = [rows.c.late] if self.question.columns.labelled_at else []
        if self.question.columns.revision:
            revision = rows.c.revision
            digits = sa.func.ltrim(revision, "0")
            size = sa.case((revision.is_(None), -1), (dialects.Digits(revision), sa.func.length(digits)), else_=0)
            text = sa.case((dialects.Digits(revision), digits), else_=sa.func.coalesce(revision, ""))
            order += [size.desc(), text.desc()]
        return order

    def _says(self, rows: sa.CTE) -> Expression:
        """What rows of one id must agree in, as one text: time, prediction and label (or error, or loss)."""
        prediction = rows.c.prediction if self.question.columns.prediction else sa.literal_column("''")
        text = sa.func.coalesce(prediction, "")
        known = sa.func.coalesce(sa.literal_column("'='").op("||")(rows.c.outcome), "")
        length = sa.cast(sa.func.length(text), sa.Text)
        parts = [sa.cast(rows.c.at, sa.Text), length, text, known]
        joined: Expression = parts[0]
        for part in parts[1:]:
            joined = joined.op("||")(sa.literal_column("'|'")).op("||")(part)
        return joined

    def _judged(self) -> sa.CTE:
        """Give what is still usable the reasons that follow from its values; every kind is final after this."""
        rows = self._ranked()
        q, c = self.question, self.question.columns
        kinds: list[tuple[Any, Any]] = [(rows.c.kind != USABLE, rows.c.kind)]
        labelled = rows.c.outcome.is_not(None)
        kinds += self._reason("unknown-label", self._unknown(rows)) if not c.loss else []
        if c.weight:
            kinds += self._reason("bad-weight", sa.and_(labelled, self._undeclared(rows.c.weight, q.weight_levels)))
        if c.selected:
            chosen = sa.func.coalesce(rows.c.selected, "").in_(_TRUE)
            unreadable = sa.func.coalesce(rows.c.selected, "").not_in((*_TRUE, *_FALSE))
            undeclared = self._undeclared(rows.c.labelling_probability, q.labelling_probabilities)
            kinds += self._reason("bad-weight", sa.or_(unreadable, sa.and_(chosen, undeclared)))
        if c.cluster:
            kinds += self._reason("no-cluster", rows.c.cluster.is_(None))
        if c.loss:
            wrong = sa.or_(rows.c.loss.is_(None), sa.not_(rows.c.loss.between(0.0, 1.0)))
            kinds += self._reason("bad-loss", sa.and_(labelled, wrong))
        names = [column for column in rows.c if column.name != "kind"]
        judged = sa.select(*names, _kind(kinds)).cte(f"{self.prefix}judged")
        return self._clustered(judged) if c.cluster else judged

    def _unknown(self, rows: sa.CTE) -> Expression:
        q, c = self.question, self.question.columns
        if c.error:
            return sa.and_(rows.c.outcome.is_not(None), rows.c.outcome.not_in((*_TRUE, *_FALSE)))
        unknown = [rows.c.prediction.is_(None)]
        if q.classes:
            classes = [text_of(value) for value in q.classes]
            unknown += [rows.c.prediction.not_in(classes), rows.c.outcome.not_in(classes)]
        return sa.or_(*unknown)

    def _undeclared(self, number: Expression, levels: Sequence[str]) -> Expression:
        return sa.or_(number.is_(None), number.not_in([float(level) for level in levels]))

    # --- clusters -----------------------------------------------------------------------------------------------------

    def _clustered(self, judged: sa.CTE) -> sa.CTE:
        """Place each cluster, whole, in the bucket of its first sample; too long and too large ones are refused."""
        q = self.question
        if q.n_max is None or q.cluster_span is None:
            raise UsageError(
                "cluster is mapped, but n_max or cluster_span is not given; a promise with clusters needs both"
            )
        usable = judged.c.kind == USABLE
        group = [judged.c.cluster]
        began = sa.func.min(judged.c.at).over(partition_by=group).label("began")
        some = sa.select(*judged.c, began).where(usable).cte(f"{self.prefix}members")
        inside = some.c.at <= some.c.began + q.cluster_span
        flags = self._flags(some, some.c.outcome.is_not(None))
        size = (
            sa.func.sum(sa.case((inside, self._size(flags)), else_=0)).over(partition_by=[some.c.cluster]).label("size")
        )
        sized = sa.select(*some.c, size).cte(f"{self.prefix}sized")
        kinds = self._reason("cluster-too-long", sized.c.at > sized.c.began + q.cluster_span)
        kinds.append((sized.c.began < q.open_from, OUTSIDE))
        kinds += self._reason("cluster-too-large", sized.c.size > q.n_max)
        kind = sa.case((sized.c.at < q.open_from, OUTSIDE), else_=_kind(kinds).element)
        names = [column.name for column in judged.c if column.name not in ("kind", "bucket")]
        ranked = sa.select(
            *[sized.c[name] for name in names], self._local(sized.c.began).label("bucket"), kind.label("kind")
        )
        other = sa.case((judged.c.at < q.open_from, OUTSIDE), else_=judged.c.kind)
        others = sa.select(*[judged.c[name] for name in names], judged.c.bucket, other.label("kind")).where(
            sa.not_(usable)
        )
        return sa.union_all(ranked, others).cte(f"{self.prefix}clustered")

    def _size(self, flags: Mapping[str, Expression]) -> Expression:
        """What counts as a label of the measure: all, the positives, or the negatives."""
        if self.question.measure == "miss":
            return flags["positives"]
        return flags["labels"] - flags["positives"] if self.question.measure == "false-alarm" else flags["labels"]

    def _by_cluster(
        self,
        rows: sa.CTE,
        keys: Sequence[sa.Label[Any] | Any],
        sums: Mapping[str, Expression],
        labelled: Expression,
    ) -> sa.Select[Any]:
        usable = rows.c.kind == USABLE
        ahead = [rows.c.ahead] if "ahead" in rows.c else []
        flat = sa.select(
            *keys,
            sa.case((usable, rows.c.cluster)).label("cluster"),
            rows.c.n,
            *[(flag * rows.c.n).label(name) for name, flag in sums.items()],
            sa.case((labelled, rows.c.at)).label("newest"),
            *ahead,
        ).cte(f"{self.prefix}flat")
        group = [flat.c[key.name] for key in keys]
        one = (
            sa.select(
                *group,
                sa.cast(sa.func.count(), sa.BigInteger).label("predictions"),
                *[_sum(flat.c[name], name) for name in sums],
                sa.func.max(flat.c.newest).label("newest"),
                *[sa.func.max(flat.c.ahead).label("ahead") for _ in ahead],
            )
            .group_by(*group, flat.c.cluster)
            .cte(f"{self.prefix}one")
        )
        wrong = {"miss": "misses", "false-alarm": "false_alarms"}.get(self.question.measure, "errors")
        size = self._size({name: one.c[name] for name in sums})
        level = sa.cast(size, sa.Text).op("||")(sa.literal_column("':'")).op("||")(sa.cast(one.c[wrong], sa.Text))
        leveled = sa.select(*one.c, sa.case((one.c.kind == USABLE, level), else_="").label("level")).cte(
            f"{self.prefix}leveled"
        )
        group = [leveled.c[key.name] for key in keys] + [leveled.c.level]
        return sa.select(
            *group,
            _sum(leveled.c.predictions, "predictions"),
            *[_sum(leveled.c[name], name) for name in sums],
            sa.func.max(leveled.c.newest).label("newest"),
            sa.cast(sa.func.count(), sa.BigInteger).label("clusters"),
            *[sa.func.max(leveled.c.ahead).label("ahead") for _ in ahead],
        ).group_by(*group)

    # --- what is added up ---------------------------------------------------------------------------------------------

    def _flags(self, rows: sa.CTE, labelled: Expression) -> dict[str, Expression]:
        """Return name -> 0 or 1 (or millionths) of every sum that this question needs."""
        q, c = self.question, self.question.columns
        flags = {"labels": _one(labelled)}
        if c.loss:
            millionths = rows.c.loss * sa.literal_column("1e6", sa.Double())
            for name, rounded in (("loss_ppm_down", sa.func.floor), ("loss_ppm_up", sa.func.ceil)):
                flags[name] = sa.case((labelled, sa.cast(rounded(millionths), sa.BigInteger)), else_=0)
            return flags
        wrong = rows.c.outcome.in_(_TRUE) if c.error else rows.c.outcome != rows.c.prediction
        flags["errors"] = _one(sa.and_(labelled, wrong))
        if q.positive is not None and not c.error:
            positive = rows.c.outcome == text_of(q.positive)
            flags["positives"] = _one(sa.and_(labelled, positive))
            flags["misses"] = _one(sa.and_(labelled, positive, wrong))
            flags["false_alarms"] = _one(sa.and_(labelled, sa.not_(positive), wrong))
        return flags

    def _level(self, rows: sa.CTE, usable: Expression, labelled: Expression) -> Expression:
        q, c = self.question, self.question.columns
        if c.weight:
            levels, number, condition = q.weight_levels, rows.c.weight, labelled
        elif c.selected:
            chosen = sa.func.coalesce(rows.c.selected, "").in_(_TRUE)
            levels, number, condition = q.labelling_probabilities, rows.c.labelling_probability, sa.and_(usable, chosen)
        else:
            return sa.literal_column("''", sa.Text())
        return sa.case(*[(sa.and_(condition, number == float(level)), level) for level in levels], else_="")


_TRUE: Final = ("1", "true")
_FALSE: Final = ("0", "false")


def _one(condition: Expression) -> Expression:
    return sa.case((condition, 1), else_=0)


def _sum(column: Expression, name: str) -> sa.Label[Any]:
    return sa.cast(sa.func.sum(column), sa.BigInteger).label(name)


def _kind(kinds: Sequence[tuple[Any, Any]], name: str = "kind") -> sa.Label[Any]:
    kind: Expression = sa.case(*kinds, else_=USABLE) if kinds else sa.literal(USABLE)
    return kind.label(name)


def _stepwise(x: Expression, pieces: Sequence[tuple[int, int | None]]) -> Expression:
    """Return the value of the piece that `x` lies in; before the first piece, the first piece's value."""
    values = [sa.null() if value is None else sa.literal_column(str(value), sa.BigInteger()) for _, value in pieces]
    if len(pieces) == 1:
        return values[0]
    return sa.case(*[(x < pieces[i + 1][0], values[i]) for i in range(len(pieces) - 1)], else_=values[-1])
