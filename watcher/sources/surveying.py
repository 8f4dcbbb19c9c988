"""What `check`, `draft` and the first look want to know of a source before they trust it."""

from __future__ import annotations

from typing import Any, Final

import sqlalchemy as sa

from watcher.sources.base import Survey
from watcher.sources.statement import Statement
from watcher.sources.tallying import Run, check

SAMPLE: Final = 200
"""Rows shown to `draft`."""
_VALUES: Final = 50


def survey_of(statement: Statement, run: Run, columns: tuple[str, ...]) -> Survey:
    """Count the values that a question would read."""
    q = statement.question
    check(q)
    rows = statement.looked_at()

    def values(part: str) -> tuple[tuple[str, int], ...]:
        if part not in rows.c:
            return ()
        column = rows.c[part]
        number = sa.func.count().label("rows")
        select = sa.select(column.label("value"), number).where(column.is_not(None)).group_by(column)
        return tuple((value, count) for value, count in run(select.order_by(number.desc(), column).limit(_VALUES)))

    label = "error" if q.columns.error else "label"
    pairs: sa.ColumnElement[Any] = sa.literal(0)
    differing: sa.ColumnElement[Any] = sa.literal(0)
    if q.columns.label and q.columns.prediction:
        both = sa.and_(rows.c.label.is_not(None), rows.c.prediction.is_not(None))
        pairs = _number(both)
        differing = _number(sa.and_(both, rows.c.label != rows.c.prediction))
    here = statement.here(rows)
    totals: list[Any] = [
        pairs,
        differing,
        sa.func.min(sa.case((here, rows.c.at))),
        sa.func.max(sa.case((here, rows.c.at))),
    ]
    totals += [sa.func.count(sa.distinct(column)) for column in statement.slice_columns(rows)]
    (found,) = run(sa.select(*[total.label(f"t{i}") for i, total in enumerate(totals)]))
    return Survey(
        columns,
        (),
        predictions=values("prediction"),
        labels=values(label),
        pairs=found[0] or 0,
        differing=found[1] or 0,
        first_time=found[2],
        last_time=found[3],
        slices=tuple(zip(q.slices, found[4:], strict=True)),
    )


def _number(condition: sa.ColumnElement[bool]) -> sa.ColumnElement[Any]:
    return sa.cast(sa.func.sum(sa.case((condition, 1), else_=0)), sa.BigInteger)
