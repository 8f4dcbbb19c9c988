"""The one statement: how rows become integers, as SQLAlchemy Core, for every engine.

Each stage is a SELECT from the one before:

    trimmed -> read -> timed -> placed -> ranked (only with an id) -> judged -> [clustered] -> counted

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
            *[flag.label(name) for name, flag in sums.items()],
            sa.case((labelled, rows.c.at)).label("newest"),
            *ahead,
        ).cte(f"{self.prefix}flat")
        group = [flat.c[key.name] for key in keys] + [flat.c.level]
        return sa.select(
            *group,
            sa.cast(sa.func.count(), sa.BigInteger).label("predictions"),
            *[_sum(flat.c[name], name) for name in sums],
            sa.func.max(flat.c.newest).label("newest"),
            *[sa.func.max(flat.c.ahead).label("ahead") for _ in ahead],
        ).group_by(*group)

    def values(self, rows: int | None = None) -> sa.Select[Any]:
        """Count the distinct values of each slice column among the rows that have a place in time."""
        placed = self._placed()
        names = [self._slice(name) for name in self.question.slices]
        some = sa.select(*[placed.c[name] for name in names]).where(placed.c.kind == USABLE)
        some_rows = (some.limit(rows) if rows is not None else some).cte(f"{self.prefix}some")
        return sa.select(*[sa.func.count(sa.distinct(some_rows.c[name])).label(name) for name in names])

    def repeated(self) -> sa.Select[Any]:
        """Select the digests of the ids that may occur more than once."""
        placed = self._placed()
        digest = dialects.Digest(placed.c.id).label("digest")
        digests = sa.select(digest).where(placed.c.kind == USABLE).cte(f"{self.prefix}digests")
        return sa.select(digests.c.digest).group_by(digests.c.digest).having(sa.func.count() > 1)

    def late_labels(self) -> sa.Select[Any]:
        """Count the labels of sealed buckets that came at or after their bucket's end + label_lag, once an id."""
        q = self.question
        timed = self._timed(since=q.released)
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
        """Select the values, as read, of rows that were rejected for `reason`."""
        rows = self._judged(raw=True)
        columns = [column for column in rows.c if column.name.startswith(("raw", "extra"))]
        return sa.select(*columns).where(rows.c.kind == kind_of(reason)).order_by(*columns).limit(limit)

    def looked_at(self) -> sa.CTE:
        """Return the rows with normalised `prediction`, `label` and `at` for a survey; NULL `at` where `where` differs."""
        return self._timed()

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

    def _trimmed(self, since: int | None, *, raw: bool) -> sa.CTE:
        columns, holds = self.table.columns, self.table.holds
        picked = [dialects.Trimmed(columns[column]).label(part) for part, column in self._parts().items()]
        picked += [
            (dialects.Trimmed(columns[column]) if holds[column] == "text" else columns[column]).label(part)
            for part, column in self._times().items()
        ]
        if raw:
            everything = {**self._times(), **self._parts()}
            picked += [columns[column].label(f"raw_{part}") for part, column in everything.items()]
            picked += [self.table.rows.c[name].label(f"extra{i}") for i, name in enumerate(self.table.extra)]
        select = sa.select(*picked).select_from(self.table.rows)
        time = self.question.columns.time
        if since is not None and holds[time] == "instant":  # lets an index on the time column bound the read
            bound = sa.func.to_timestamp(since, type_=sa.DateTime(timezone=True))
            select = select.where(sa.or_(columns[time] >= bound, columns[time].is_(None)))
        return select.cte(f"{self.prefix}trimmed")

    def _read(self, since: int | None, *, raw: bool) -> sa.CTE:
        trimmed = self._trimmed(since, raw=raw)
        numbers = {"weight", "loss", "labelling_probability"}
        picked: list[Expression] = [column for column in trimmed.c if column.name.startswith(("raw", "extra"))]
        for part in self._parts():
            value = trimmed.c[part]
            picked.append(
                (dialects.Number(value) if part in numbers else sa.func.nullif(dialects.Plain(value), "")).label(part)
            )
            if part == "loss":
                picked.append(sa.func.nullif(value, "").label("loss_text"))
        for part, column in self._times().items():
            value = trimmed.c[part]
            held = self.table.holds[column]
            picked.append(value.label(part))
            if held == "text" and self.question.time_format == "rfc3339":
                picked.append(dialects.Wall(value).label(f"{part}_wall"))
        return sa.select(*picked).cte(f"{self.prefix}read")

    def _timed(self, since: int | None = None, *, raw: bool = False) -> sa.CTE:
        read = self._read(since, raw=raw)
        drop = {"time", "labelled_at", "time_wall", "labelled_at_wall"}
        picked: list[Expression] = [column for column in read.c if column.name not in drop]
        for part, column in self._times().items():
            instant = self._instant(read, part, self.table.holds[column])
            picked.append(instant.label("at_read" if part == "time" else "labelled_at_read"))
            if part == "labelled_at":
                empty = read.c[part].is_(None)
                if self.table.holds[column] == "text":
                    empty = sa.or_(empty, read.c[part] == "")
                picked.append(sa.case((empty, 0), else_=1).label("labelled_at_given"))
        rows = sa.select(*picked).cte(f"{self.prefix}instants")
        kept = [column for column in rows.c if column.name not in ("at_read", "labelled_at_read")]
        times = [
            sa.case((rows.c[name].between(0, LAST_SECOND), rows.c[name])).label(name.removesuffix("_read"))
            for name in ("at_read", "labelled_at_read")
            if name in rows.c
        ]
        return sa.select(*kept, *times).cte(f"{self.prefix}timed")

    def _instant(self, read: sa.CTE, part: str, held: Held) -> Expression:
        """Seconds since 1970 of a time column, or NULL; the wall clock of a declared zone is turned by bound offsets."""
        q = self.question
        value = read.c[part]
        units = SECONDS.get(q.time_format)
        if held == "text":
            if units is not None:
                return dialects.Count(value, sa.literal_column(str(units)))
            wall = read.c[f"{part}_wall"]
            offset = dialects.Offset(value, wall)
            return wall - (sa.func.coalesce(offset, self._zone(wall)) if q.source_time_zone else offset)
        if held == "number":
            return dialects.Amount(value, sa.literal_column(str(units or 1)))
        seconds = dialects.Stamp(value)
        return seconds if held == "instant" else seconds - self._zone(seconds)

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

    def _placed(self, since: int | None = None, *, raw: bool = False) -> sa.CTE:
        """Give each row its place in time, and the kind that follows from id, time and `where` alone."""
        q, c = self.question, self.question.columns
        rows = self._timed(since, raw=raw)
        at = rows.c.at
        bad_time = at.is_(None)
        if c.labelled_at:
            bad_time = sa.or_(bad_time, sa.and_(rows.c.labelled_at_given == 1, rows.c.labelled_at.is_(None)))
        kinds: list[tuple[Any, int]] = [(condition, OUTSIDE) for condition in self._elsewhere(rows)]
        kinds.append((at < self._since(), OUTSIDE))
        if q.at_given:
            kinds.append((at >= q.now, OUTSIDE))
        kinds += self._reason("no-id", rows.c.id.is_(None)) if c.id else []
        kinds += self._reason("bad-time", bad_time)
        kinds += self._reason("future-time", at > q.now)
        picked: list[Expression] = [*rows.c, _kind(kinds), self._local(at).label("bucket")]
        late: Expression | None = None
        if c.labelled_at:
            after = rows.c.labelled_at
            late = sa.or_(after >= q.now, self._local(after - q.label_lag) > self._local(at))
            picked.append(sa.case((late, 1), else_=0).label("late"))
        if c.labelled_at or q.at_given:
            later = [at >= q.now, *([rows.c.labelled_at >= q.now] if c.labelled_at else [])]
            picked.append(sa.case((sa.or_(*later), 1), else_=0).label("ahead"))
        unlabelled = [late] if late is not None else []
        if c.selected:
            unlabelled.append(sa.func.coalesce(rows.c.selected, "").not_in(_TRUE))
        outcome = self._outcome_raw(rows)
        picked.append((sa.case((sa.or_(*unlabelled), None), else_=outcome) if unlabelled else outcome).label("outcome"))
        return sa.select(*picked).cte(f"{self.prefix}placed")

    def _reason(self, reason: str, condition: Expression) -> list[tuple[Any, int]]:
        """One branch of `kind`; tests take branches away here to see that their absence is noticed."""
        return [(condition, kind_of(reason))]

    def _ranked(self, *, raw: bool) -> sa.CTE:
        """Leave one row of each id usable: in time before late, the highest revision, and nothing if the rest disagrees."""
        placed = self._placed(raw=raw)
        c = self.question.columns
        if not c.id or self.unique:
            return placed
        alone: Expression = placed.c.kind != USABLE
        live = replace(self, prefix="live_")._placed(self._since(), raw=raw)
        among: Expression = live.c.kind == USABLE
        if self.suspects is not None:
            digests = sa.select(self.suspects.c.digest)
            alone = sa.or_(alone, dialects.Digest(placed.c.id).not_in(digests))
            among = sa.and_(among, dialects.Digest(live.c.id).in_(digests))
        some = sa.select(live).where(among).cte(f"{self.prefix}some")
        order = self._order(some)
        rank = (sa.func.rank().over(partition_by=some.c.id, order_by=order) if order else sa.literal_column("1")).label(
            "rank"
        )
        says = self._says(some).label("says")
        first = sa.select(*some.c, rank, says).cte(f"{self.prefix}first")
        group = [first.c.id, first.c.rank]
        rest = [
            sa.func.coalesce(sa.cast(first.c[name], sa.Text), "")
            for name in self._parts()
            if name not in ("id", "revision")
        ]
        second = sa.select(
            *first.c,
            sa.func.row_number().over(partition_by=group, order_by=[first.c.says, *rest]).label("n"),
            sa.func.min(first.c.says).over(partition_by=group).label("least"),
            sa.func.max(first.c.says).over(partition_by=group).label("most"),
        ).cte(f"{self.prefix}second")
        kinds: list[tuple[Any, int]] = [(second.c.rank > 1, DUPLICATE)]
        kinds += self._reason("conflicting-duplicate", second.c.least != second.c.most)
        kinds.append((second.c.n > 1, DUPLICATE))
        names = [column.name for column in placed.c if column.name != "kind"]
        ranked = sa.select(*[second.c[name] for name in names], _kind(kinds))
        others = sa.select(*[placed.c[name] for name in names], placed.c.kind).where(alone)
        return sa.union_all(ranked, others).cte(f"{self.prefix}ranked")

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

    def _judged(self, *, raw: bool = False) -> sa.CTE:
        """Give what is still usable the reasons that follow from its values; every kind is final after this."""
        rows = self._ranked(raw=raw)
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
        some = sa.select(*judged.c, began).where(usable).cte(f"{self.prefix}some")
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
            *[flag.label(name) for name, flag in sums.items()],
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
        leveled = sa.select(*one.c, sa.case((one.c.kind == USABLE, level), else_="").label("level")).cte(f"{self.prefix}leveled")
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


def _kind(kinds: Sequence[tuple[Any, Any]]) -> sa.Label[Any]:
    kind: Expression = sa.case(*kinds, else_=USABLE) if kinds else sa.literal(USABLE)
    return kind.label("kind")


def _stepwise(x: Expression, pieces: Sequence[tuple[int, int | None]]) -> Expression:
    """Return the value of the piece that `x` lies in; before the first piece, the first piece's value."""
    values = [sa.null() if value is None else sa.literal_column(str(value), sa.BigInteger()) for _, value in pieces]
    if len(pieces) == 1:
        return values[0]
    return sa.case(*[(x < pieces[i + 1][0], values[i]) for i in range(len(pieces) - 1)], else_=values[-1])
