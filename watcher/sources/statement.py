"""The one statement: how rows become integers, as SQLAlchemy Core, for every engine.

Each stage is a SELECT from the one before:

    exact -> timed -> moments -> [gathered] -> texts -> placed -> [ranked] -> judged -> [clustered] -> counted

Each row ends in exactly one `kind`: usable, outside, duplicate, or the first reason that applies, in the order of
`records.REASONS`. Names of columns and values of the outside world enter as quoted names and bound values only.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import sqlalchemy as sa

from watcher.errors import UsageError
from watcher.sources import dialects
from watcher.sources.normal import text_of
from watcher.sources.stages import (
    DUPLICATE,
    FALSE,
    OUTSIDE,
    TRUE,
    USABLE,
    Expression,
    Held,
    Stages,
    Table,
    case_of,
    kind_of,
    one,
    parts_of,
    reason_of,
    total,
)

__all__ = ["DUPLICATE", "OUTSIDE", "USABLE", "Held", "Statement", "Table", "kind_of", "parts_of", "reason_of"]


@dataclass(frozen=True, slots=True)
class Statement(Stages):
    """Builds what one question asks of one table."""

    # --- what is asked ------------------------------------------------------------------------------------------------

    def counted(self, slices: Sequence[str]) -> sa.Select[Any]:
        """Count by kind, bucket, level and the given slice columns (crossed). With clusters: at most one slice column."""
        rows = self.judged()
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
            total(flat.c.n, "predictions"),
            *[total(flat.c[name], name) for name in sums],
            sa.func.max(flat.c.newest).label("newest"),
            *[sa.func.max(flat.c.ahead).label("ahead") for _ in ahead],
        ).group_by(*group)

    def values(self, rows: int | None = None) -> sa.Select[Any]:
        """Count the distinct values of each slice column among the rows that have a place in time, or some of them."""
        placed = self.placed()
        names = [self._slice(name) for name in self.question.slices]
        some = sa.select(*[placed.c[name] for name in names]).where(placed.c.kind == USABLE)
        some_rows = (some.limit(rows) if rows is not None else some).cte("some")
        counts: list[Expression] = [sa.func.count(sa.distinct(some_rows.c[name])).label(name) for name in names]
        return sa.select(*counts)

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
            # Its bucket is sealed by now, also by this very look: one look over a year counts what daily looks counted.
            self._local(sa.literal(q.now - q.label_lag)) > self._local(timed.c.at),
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
        rows = replace(self, raw=True).judged()
        raw = [rows.c[f"raw{i}"] for i in range(len(parts_of(self.question)))]
        extra = [rows.c[f"extra{i}"] for i in range(len(self.table.extra))]
        return sa.select(*raw, *extra).where(rows.c.kind == kind_of(reason)).order_by(*extra, *raw).limit(limit)

    def looked_at(self) -> sa.CTE:
        """Return all rows with normalised texts and `at`, for a survey."""
        return self._texts(self._timed(self._exact()))

    def _ranked(self) -> sa.CTE:
        """Leave one row of each id usable: in time before late, the highest revision, and nothing if the rest disagrees."""
        c = self.question.columns
        if not c.id or self.unique:
            return self.placed(gather=True)
        live_ = replace(self, prefix="live_")
        if self.suspects is not None:
            alone, some = self.placed(gather=True, among=False), live_.placed(among=True)
            others = sa.select(alone)
        else:
            alone, live = self.placed(gather=True), live_.placed(self._since())
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
        kind = case_of(kinds)
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

    def judged(self) -> sa.CTE:
        """Give what is still usable the reasons that follow from its values; every kind is final after this."""
        rows = self._ranked()
        q, c = self.question, self.question.columns
        kinds: list[tuple[Any, Any]] = [(rows.c.kind != USABLE, rows.c.kind)]
        labelled = rows.c.outcome.is_not(None)
        kinds += self._reason("unknown-label", self._unknown(rows)) if not c.loss else []
        if c.weight:
            kinds += self._reason("bad-weight", sa.and_(labelled, self._undeclared(rows.c.weight, q.weight_levels)))
        if c.selected:
            chosen = sa.func.coalesce(rows.c.selected, "").in_(TRUE)
            unreadable = sa.func.coalesce(rows.c.selected, "").not_in((*TRUE, *FALSE))
            undeclared = self._undeclared(rows.c.labelling_probability, q.labelling_probabilities)
            kinds += self._reason("bad-weight", sa.or_(unreadable, sa.and_(chosen, undeclared)))
        if c.cluster:
            kinds += self._reason("no-cluster", rows.c.cluster.is_(None))
        if c.loss:
            wrong = sa.or_(rows.c.loss.is_(None), sa.not_(rows.c.loss.between(0.0, 1.0)))
            kinds += self._reason("bad-loss", sa.and_(labelled, wrong))
        names = [column for column in rows.c if column.name != "kind"]
        judged = sa.select(*names, case_of(kinds)).cte(f"{self.prefix}judged")
        return self._clustered(judged) if c.cluster else judged

    def _unknown(self, rows: sa.CTE) -> Expression:
        q, c = self.question, self.question.columns
        if c.error:
            return sa.and_(rows.c.outcome.is_not(None), rows.c.outcome.not_in((*TRUE, *FALSE)))
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
        kind = sa.case((sized.c.at < q.open_from, OUTSIDE), else_=case_of(kinds).element)
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
                *[total(flat.c[name], name) for name in sums],
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
            total(leveled.c.predictions, "predictions"),
            *[total(leveled.c[name], name) for name in sums],
            sa.func.max(leveled.c.newest).label("newest"),
            sa.cast(sa.func.count(), sa.BigInteger).label("clusters"),
            *[sa.func.max(leveled.c.ahead).label("ahead") for _ in ahead],
        ).group_by(*group)

    # --- what is added up ---------------------------------------------------------------------------------------------

    def _flags(self, rows: sa.CTE, labelled: Expression) -> dict[str, Expression]:
        """Return name -> 0 or 1 (or millionths) of every sum that this question needs."""
        q, c = self.question, self.question.columns
        flags = {"labels": one(labelled)}
        if c.loss:
            millionths = rows.c.loss * sa.literal_column("1e6", sa.Double())
            for name, rounded in (("loss_ppm_down", sa.func.floor), ("loss_ppm_up", sa.func.ceil)):
                flags[name] = sa.case((labelled, sa.cast(rounded(millionths), sa.BigInteger)), else_=0)
            return flags
        wrong = rows.c.outcome.in_(TRUE) if c.error else rows.c.outcome != rows.c.prediction
        flags["errors"] = one(sa.and_(labelled, wrong))
        if q.positive is not None and not c.error:
            positive = rows.c.outcome == text_of(q.positive)
            flags["positives"] = one(sa.and_(labelled, positive))
            flags["misses"] = one(sa.and_(labelled, positive, wrong))
            flags["false_alarms"] = one(sa.and_(labelled, sa.not_(positive), wrong))
        return flags

    def _level(self, rows: sa.CTE, usable: Expression, labelled: Expression) -> Expression:
        q, c = self.question, self.question.columns
        if c.weight:
            levels, number, condition = q.weight_levels, rows.c.weight, labelled
        elif c.selected:
            chosen = sa.func.coalesce(rows.c.selected, "").in_(TRUE)
            levels, number, condition = q.labelling_probabilities, rows.c.labelling_probability, sa.and_(usable, chosen)
        else:
            return sa.literal_column("''", sa.Text())
        return sa.case(*[(sa.and_(condition, number == float(level)), level) for level in levels], else_="")
